"""An examination sent again: what stayed, what changed, what was taken back.

Source: FHIR R4 Observation.status and DiagnosticReport.status (amended, corrected, entered-in-error).
"""

from __future__ import annotations

from typing import Any, Final

from fhirgallop.observations.identity import identity_of
from fhirgallop.observations.text import taken_back
from fhirgallop.outcome import Issue

# What the moment of conversion, not the examiner, decides.
_NOT_CONTENT: Final = frozenset({"issued", "status"})
_SIGNED: Final = frozenset({"final", "amended", "corrected"})


def revise(
    resources: dict[str, dict[str, Any]], earlier: dict[str, Any], exam_status: str
) -> dict[str, dict[str, Any]]:
    """`resources` with the status that each has after `earlier` (the Bundle given before).

    Unchanged resources come back exactly as they were. A changed one is `corrected` when the sender calls the
    examination so, else `amended` (a draft that is still a draft, or is signed now, keeps the new status).
    One that is no longer there is given again as `entered-in-error`.
    """
    before = {
        urn: entry["resource"]
        for entry in earlier.get("entry", ())
        if (urn := identity_of(entry.get("resource", {})))
    }
    revised: dict[str, dict[str, Any]] = {}
    for urn, resource in resources.items():
        old = before.get(urn)
        revised[urn] = resource if old is None else _after(old, resource, exam_status)
    for urn, old in before.items():
        if urn not in resources:
            revised[urn] = old if old["status"] == "entered-in-error" else _withdrawn(old)
    return revised


def draft_after_signed(earlier: dict[str, Any], exam_status: str) -> Issue | None:
    """A draft sent after the signed examination: it came late, or the sender forgot to say what it is."""
    if exam_status != "preliminary":
        return None
    if not any(entry.get("resource", {}).get("status") in _SIGNED for entry in earlier.get("entry", ())):
        return None
    words = (
        "This examination was sent as signed before, and a draft cannot take its place; nothing was changed. "
        "Send the change as final, amended or corrected."
    )
    return Issue("error", "conflict", "exam-draft-after-signed", words)


def _withdrawn(old: dict[str, Any]) -> dict[str, Any]:
    taken = {**old, "status": "entered-in-error"}
    if "text" in old:
        taken["text"] = taken_back(old["text"])
    return taken


def _after(old: dict[str, Any], new: dict[str, Any], exam_status: str) -> dict[str, Any]:
    same = _content(old) == _content(new)
    if new["status"] == "entered-in-error":
        return old if same and old["status"] == "entered-in-error" else new
    if old["status"] == "preliminary" or new["status"] == "preliminary":
        return old if same and old["status"] == new["status"] else new
    if same and old["status"] != "entered-in-error":
        return old
    return {**new, "status": "corrected" if exam_status == "corrected" else "amended"}


def _content(resource: dict[str, Any]) -> dict[str, Any]:
    return {name: value for name, value in resource.items() if name not in _NOT_CONTENT}
