"""$expand, $validate-code and $lookup over what is known here.

Source: FHIR R4 and R5 operations ValueSet-expand, ValueSet-validate-code, CodeSystem-validate-code and
CodeSystem-lookup.
"""

from __future__ import annotations

import uuid
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

from fhirgallop.codes import fhirjson, systems
from fhirgallop.observations.editions import Edition
from fhirgallop.outcome import Issue, operation_outcome
from fhirgallop.service.answers import refusal
from fhirgallop.service.fhir.known_codes import Members, members, system
from fhirgallop.service.fhir.parameters import Given, Part, one, text

MOST_EXPANDED: Final = 1000

_CODE: Final = {
    "url": "uri", "code": "code", "display": "string", "coding": "Coding",
    "codeableConcept": "CodeableConcept", "date": "dateTime", "abstract": "boolean",
    "displayLanguage": "code",
}  # fmt: skip
CODE_SYSTEM_CODE: Final = {**_CODE, "version": "string"}
VALUE_SET_CODE: Final = {**_CODE, "system": "uri", "systemVersion": "string", "valueSetVersion": "string"}
LOOKUP: Final = {
    "code": "code", "system": "uri", "version": "string", "coding": "Coding", "date": "dateTime",
    "displayLanguage": "code", "property": "code",
}  # fmt: skip
EXPAND: Final = {
    "url": "uri", "valueSetVersion": "string", "filter": "string", "offset": "integer", "count": "integer",
    "displayLanguage": "code", "activeOnly": "boolean", "includeDesignations": "boolean", "date": "dateTime",
}  # fmt: skip
_NAMESPACE: Final = uuid.uuid5(uuid.NAMESPACE_URL, systems.BASE + "/expansion")


@dataclass(frozen=True, slots=True)
class Verdict:
    """What is known of one coding: valid, not valid, or (None) nothing that could be said."""

    valid: bool | None
    coding: Mapping[str, Any]
    display: str = ""
    version: str = ""
    issues: tuple[Issue, ...] = ()


def expand(edition: Edition, url: str, given: Given, at: str) -> bytes:
    """A value set with its codes.

    Args:
        edition: FHIR edition.
        url: canonical of the value set.
        given: parameters.
        at: now, as a FHIR instant.
    """
    found = _members(edition, url, given)
    if found.open_systems:
        said = "The value set takes whole code systems that cannot be listed here; ask by $validate-code."
        raise refusal(422, "too-costly", "expand-open", said)
    wanted = text(given, "filter").casefold().split()
    codes = [
        (system_, code, words)
        for (system_, code), words in found.codes.items()
        if all(part in (words or code).casefold() for part in wanted)
    ]
    count, offset = one(given, "count"), one(given, "offset") or 0
    if count is None and len(codes) > MOST_EXPANDED:
        said = (
            f"The value set has more than {MOST_EXPANDED} codes; ask for them by count and offset, or filter."
        )
        raise refusal(422, "too-costly", "expand-too-many", said)
    page = codes[offset:] if count is None else codes[offset : offset + min(count, MOST_EXPANDED)]
    echo = [
        {"name": name, f"value{'Uri' if name == 'url' else _type(name)}": values[0]}
        for name, values in given.items()
    ]
    expansion: dict[str, Any] = {
        "identifier": f"urn:uuid:{uuid.uuid5(_NAMESPACE, repr((edition, url, sorted(given.items()))))}",
        "timestamp": at,
        "total": len(codes),
    }
    if count is not None or offset:
        expansion["offset"] = offset
    if echo:
        expansion["parameter"] = echo
    if page:
        expansion["contains"] = [
            {"system": s, "code": code, **({"display": words} if words else {})} for s, code, words in page
        ]
    resource: dict[str, Any] = {"resourceType": "ValueSet", "url": url}
    if found.version:
        resource["version"] = found.version
    if found.title:
        resource["title"] = found.title
    return fhirjson.write({**resource, "status": "active", "expansion": expansion})


def in_value_set(edition: Edition, url: str, given: Given) -> list[Part]:
    """Whether a code is in a value set."""
    found = _members(edition, url, given)

    def judge(coding: Mapping[str, Any], place: str) -> Verdict:
        return _member(edition, found, coding, place)

    return _told([judge(coding, place) for coding, place in _codings(given, text(given, "system"))])


def in_code_system(edition: Edition, url: str, given: Given) -> list[Part]:
    """Whether a code is in a code system."""
    return _told([_coded(edition, coding, place) for coding, place in _codings(given, url)])


def lookup(edition: Edition, given: Given) -> list[Part]:
    """What is known of a code: its system's name, the system's version, its words."""
    ((coding, _), *more) = _codings(given, text(given, "system")) or [({}, "")]
    url, code = str(coding.get("system", "")), str(coding.get("code", ""))
    if more or not url or not code:
        raise refusal(400, "required", "lookup-code", "Send one code with its system, or one coding.")
    known = system(edition, url)
    found = known.codes.get(code) if known else None
    if known is None or found is None:
        said = "There is no such code in this system."
        if known is None or not known.complete:
            said = "This code is not known here; that says nothing of whether there is one."
        raise refusal(404, "not-found", "lookup-unknown", said)
    parts: list[Part] = [("name", "string", known.name)]
    if known.version:
        parts.append(("version", "string", known.version))
    parts.append(("display", "string", found.display))
    if edition == "R5":
        parts += [("code", "code", code), ("system", "uri", url)]
    return parts


def _members(edition: Edition, url: str, given: Given) -> Members:
    plain, _, version = url.partition("|")
    version = version or text(given, "valueSetVersion")
    found = members(edition, plain)
    if found is None or (version and found.version and version != found.version):
        said = "This value set, or this version of it, is not known here; GET ValueSet lists ours."
        raise refusal(404, "not-found", "unknown-value-set", said)
    return found


def _codings(given: Given, system_: str) -> list[tuple[Mapping[str, Any], str]]:
    """The codings to be judged with their places; exactly one of the three ways to send them may be used."""
    sent = [name for name in ("code", "coding", "codeableConcept") if name in given]
    if len(sent) != 1:
        said = "Send exactly one of code (with system), coding, codeableConcept."
        raise refusal(400, "required" if not sent else "invalid", "code-source", said)
    value = one(given, sent[0])
    if sent[0] == "code":
        display = text(given, "display")
        return [({"system": system_, "code": value, **({"display": display} if display else {})}, "")]
    if sent[0] == "coding":
        return [(value, "Coding.")]
    codings = value.get("coding")
    if not isinstance(codings, list) or not codings or not all(isinstance(c, dict) for c in codings):
        raise refusal(400, "required", "code-source", "The codeableConcept has no coding.")
    return [(c, f"CodeableConcept.coding[{number}].") for number, c in enumerate(codings[:50])]


def _coded(edition: Edition, coding: Mapping[str, Any], place: str) -> Verdict:
    url, code = str(coding.get("system", "")), str(coding.get("code", ""))
    known = system(edition, url)
    if known is None:
        said = "This code system is not known here; the code was not judged."
        issue = Issue("warning", "not-found", "unknown-code-system", said, f"{place}system")
        return Verdict(None, coding, issues=(issue,))
    found = known.codes.get(code)
    if found is not None:
        return _worded(coding, found.display, known.version, place, own_words=found.own_words)
    if known.complete:
        issue = Issue("error", "code-invalid", "unknown-code", "There is no such code in this system.",
                      f"{place}code")  # fmt: skip
        return Verdict(False, coding, version=known.version, issues=(issue,))
    issue = Issue("warning", "not-found", "code-not-known-here",
                  "Of this system only the codes in use are known here, and this is none of them; it was not "
                  "judged.", f"{place}code")  # fmt: skip
    return Verdict(None, coding, version=known.version, issues=(issue,))


def _member(edition: Edition, found: Members, coding: Mapping[str, Any], place: str) -> Verdict:
    url, code = str(coding.get("system", "")), str(coding.get("code", ""))
    held = [s for s, one_ in found.codes if one_ == code and url in ("", s)]
    if len(held) == 1:
        known = system(edition, held[0])
        words = found.codes[held[0], code]
        version = known.version if known else ""
        return _worded({**coding, "system": held[0]}, words, version, place, own_words=bool(words))
    if url in found.open_systems or (not url and (found.open_systems or held)):
        issue = Issue("warning", "not-supported", "value-set-open",
                      "Whether the code is in the value set cannot be told here; send its system, or ask a "
                      "terminology server.", f"{place}code")  # fmt: skip
        return Verdict(None, coding, issues=(issue,))
    issue = Issue(
        "error", "code-invalid", "not-in-value-set", "The code is not in the value set.", f"{place}code"
    )
    return Verdict(False, coding, issues=(issue,))


def _worded(coding: Mapping[str, Any], words: str, version: str, place: str, *, own_words: bool) -> Verdict:
    said = coding.get("display")
    if not isinstance(said, str) or not words or said.casefold() == words.casefold():
        return Verdict(True, coding, words, version)
    if own_words:
        text_ = f"The display is not that of the code; it is: {words}."
        wrong = Issue("error", "invalid", "wrong-display", text_, f"{place}display")
        return Verdict(False, coding, words, version, (wrong,))
    text_ = (
        f"The display is not the one known here ({words}); whether it is another right one was not judged."
    )
    other = Issue("warning", "invalid", "other-display", text_, f"{place}display")
    return Verdict(True, coding, words, version, (other,))


def _told(verdicts: Sequence[Verdict]) -> list[Part]:
    """The answer; 422 where nothing can be said of any of the codings: that is not the same as no."""
    best = next((v for v in verdicts if v.valid), None)
    issues = [issue for verdict in verdicts for issue in verdict.issues]
    if best is None and any(verdict.valid is None for verdict in verdicts):
        said = "Nothing can be said of this code here: " + " ".join(dict.fromkeys(i.text for i in issues))
        raise refusal(422, "not-found", "code-not-judged", said)
    parts: list[Part] = [("result", "boolean", best is not None)]
    verdict = best or verdicts[0]
    if best is None or best.issues:
        parts.append(("message", "string", _words(verdict.issues)))
    if verdict.display:
        parts.append(("display", "string", verdict.display))
    for name, kind in (("code", "code"), ("system", "uri")):
        if verdict.coding.get(name):
            parts.append((name, kind, verdict.coding[name]))
    if verdict.version:
        parts.append(("version", "string", verdict.version))
    if issues:
        parts.append(("issues", "resource", operation_outcome(issues)))
    return parts


def _words(issues: Iterable[Issue]) -> str:
    return " ".join(dict.fromkeys(issue.text for issue in issues))


def _type(name: str) -> str:
    kind = EXPAND[name]
    return f"{kind[0].upper()}{kind[1:]}"
