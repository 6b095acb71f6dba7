"""Core profiles cut to what they add to their type: StructureDefinitions with short snapshots, no prose."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from fhirgallop.conformance.editions.structures import SD

Definition = Mapping[str, Any]

KEPT = (
    "id",
    "path",
    "sliceName",
    "min",
    "max",
    "contentReference",
    "maxLength",
)
_TYPE_KEPT = ("code", "profile", "targetProfile")
_CONSTRAINT_KEPT = ("key", "severity", "human", "expression")


def profile_rows(structures: Mapping[str, Definition], types: Mapping[str, Any]) -> dict[str, Definition]:
    """A cut StructureDefinition for each core profile on a resource, by canonical."""
    return {
        url: cut_profile(definition, types)
        for url, definition in structures.items()
        if definition.get("kind") == "resource"
        and definition.get("derivation") == "constraint"
        and definition.get("type") in types
        and "snapshot" in definition
    }


def cut_profile(definition: Definition, types: Mapping[str, Any]) -> Definition:
    """The definition with only what is judged; elements that say nothing of their own are gone."""
    elements = [_cut(e, types) for e in definition["snapshot"]["element"]]
    told = {e["id"] for e in elements if _tells(e)}
    needed = {step for ident in told for step in _line(ident)}
    return {
        "resourceType": "StructureDefinition",
        "url": definition["url"],
        "type": definition["type"],
        "kind": definition["kind"],
        "derivation": "constraint",
        "baseDefinition": definition.get("baseDefinition", ""),
        "snapshot": {"element": [e for e in elements if e["id"] in needed]},
    }


def _line(ident: str) -> list[str]:
    parts = ident.split(".")
    return [".".join(parts[: i + 1]) for i in range(len(parts))]


def _cut(element: Definition, types: Mapping[str, Any]) -> dict[str, Any]:
    row = {key: element[key] for key in KEPT if key in element}
    row.update((k, v) for k, v in element.items() if k.startswith(("fixed", "pattern")))
    if "type" in element:
        row["type"] = [{k: t[k] for k in _TYPE_KEPT if k in t} for t in element["type"]]
    if "binding" in element and element["binding"].get("strength") in ("required", "extensible"):
        row["binding"] = {k: v for k, v in element["binding"].items() if k in ("strength", "valueSet")}
    if "slicing" in element:
        row["slicing"] = {
            k: v for k, v in element["slicing"].items() if k in ("discriminator", "ordered", "rules")
        }
    own = [
        {k: c[k] for k in _CONSTRAINT_KEPT if k in c}
        for c in element.get("constraint", ())
        if str(c.get("source", "")).removeprefix(SD) not in types
    ]
    if own:
        row["constraint"] = own
    row["base"] = element.get("base", {})
    return row


def _tells(element: Mapping[str, Any]) -> bool:
    """Whether an element says more than the type it constrains: bounds, values, slices, bindings."""
    base = element.get("base", {})
    bounds = (element.get("min"), element.get("max")) != (base.get("min"), base.get("max"))
    slicing = "slicing" in element and not element["path"].endswith(("extension", "Extension"))
    return (
        bounds
        or slicing
        or "constraint" in element
        or ":" in element["id"].rpartition(".")[2]
        or any(key.startswith(("fixed", "pattern")) for key in element)
    )
