"""ConceptMap/$translate: what a code means in another system, by the maps that are known here.

Source: FHIR R4 and R5 operation ConceptMap-translate; ConceptMap ("dependsOn", "unmapped"). A match whose
dependencies the caller does not meet is none; matches that say "no match" are given out, and do not make the
result true; the reverse of a map is never inferred.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

from fhirgallop.observations.editions import Edition
from fhirgallop.service.answers import refusal
from fhirgallop.service.fhir.parameters import Given, Part, one, parts_of, text

MATCHLESS: Final = frozenset({"unmatched", "disjoint", "not-related-to"})
_MOST: Final = 500

_R4: Final = {
    "url": "uri", "conceptMap": "Resource", "conceptMapVersion": "string", "code": "code", "system": "uri",
    "version": "string", "source": "uri", "coding": "Coding", "codeableConcept": "CodeableConcept",
    "target": "uri", "targetsystem": "uri", "dependency": "Part", "reverse": "boolean",
}  # fmt: skip
_R5: Final = {
    "url": "uri", "conceptMap": "Resource", "conceptMapVersion": "string", "sourceCode": "code",
    "system": "uri", "version": "string", "sourceScope": "uri", "sourceCoding": "Coding",
    "sourceCodeableConcept": "CodeableConcept", "targetCode": "code", "targetCoding": "Coding",
    "targetCodeableConcept": "CodeableConcept", "targetScope": "uri", "targetSystem": "uri",
    "dependency": "Part",
}  # fmt: skip


@dataclass(frozen=True, slots=True)
class Match:
    """One target of a map.

    Attributes:
        map: the ConceptMap.
        group: the group it stands in.
        target: the target as written in the map.
    """

    map: Mapping[str, Any]
    group: Mapping[str, Any]
    target: Mapping[str, Any]

    @property
    def relation(self) -> str:
        """R4 equivalence, or R5 relationship."""
        return str(self.target.get("equivalence") or self.target.get("relationship") or "relatedto")


def known_parameters(edition: Edition) -> Mapping[str, str]:
    """The parameters of the operation, with their types."""
    return _R5 if edition == "R5" else _R4


def sources(given: Given, edition: Edition) -> list[Mapping[str, Any]]:
    """The codings to be translated; exactly one of the three ways to send them may be used.

    Raises:
        RefusalError: 400 where none or several are, 422 where the reverse is asked for.
    """
    if one(given, "reverse") or one(given, "targetCode", "targetCoding", "targetCodeableConcept"):
        said = "A map is read in its own direction; what it says is not to be turned round."
        raise refusal(422, "not-supported", "translate-reverse", said)
    prefix = ("sourceCode", "sourceCoding", "sourceCodeableConcept") if edition == "R5" else (
        "code", "coding", "codeableConcept")  # fmt: skip
    sent = [name for name in prefix if name in given]
    if len(sent) != 1:
        said = f"Send exactly one of {', '.join(prefix)}."
        raise refusal(400, "required" if not sent else "invalid", "translate-source", said)
    value = one(given, sent[0])
    if sent[0] == prefix[0]:
        if not text(given, "system"):
            raise refusal(400, "required", "translate-system", "A code needs its system.")
        return [{"system": text(given, "system"), "code": value}]
    codings = value.get("coding") if sent[0] == prefix[2] else [value]
    found: list[Mapping[str, Any]] = [
        c for c in codings or () if isinstance(c, dict) and c.get("system") and c.get("code")
    ]
    if not found:
        raise refusal(400, "required", "translate-system", "A coding needs its system and its code.")
    return found


def translate(
    maps: Sequence[Mapping[str, Any]], codings: Iterable[Mapping[str, Any]], given: Given
) -> tuple[list[Match], list[str]]:
    """The matches, and what those left out depend on: the element (R4) or attribute (R5) to send."""
    met = dict(_dependencies(given))
    wanted = text(given, "targetsystem", "targetSystem")
    found: list[Match] = []
    left_out: dict[str, None] = {}
    for coding in codings:
        for concept_map in maps:
            for group in _objects(concept_map.get("group")):
                if group.get("source") != coding["system"] or (wanted and group.get("target") != wanted):
                    continue
                targets, unmet = _of_group(group, str(coding["code"]), met)
                left_out.update(dict.fromkeys(unmet))
                found += [Match(concept_map, group, target) for target in targets]
    return found[:_MOST], list(left_out)


def told(matches: Sequence[Match], edition: Edition, *, left_out: Sequence[str]) -> list[Part]:
    """The answer: result, message, and every match with what it hangs on and says beside."""
    usable = any(match.relation not in MATCHLESS and "code" in match.target for match in matches)
    parts: list[Part] = [("result", "boolean", usable)]
    if not usable:
        said = "No match is known here."
        if matches:
            said = "The map says that there is no match."
        if left_out:
            form = "attribute and value" if edition == "R5" else "element and concept"
            said = "The meaning hangs on more than the code; send it as dependency "
            said += f"({form}): {', '.join(left_out)}."
        parts.append(("message", "string", said))
    return [*parts, *(("match", "part", list(_match(match, edition))) for match in matches)]


def _of_group(
    group: Mapping[str, Any], code: str, met: Mapping[str, set[str]]
) -> tuple[list[Mapping[str, Any]], list[str]]:
    """The targets of a code; the group's rule for what is not mapped only where the code is not in it."""
    elements = [e for e in _objects(group.get("element")) if e.get("code") == code]
    if not elements:
        return list(_unmapped(group, code)), []
    found: list[Mapping[str, Any]] = []
    unmet: list[str] = []
    for element in elements:
        if element.get("noMap"):
            found.append({"relationship": "not-related-to"})
        for target in _objects(element.get("target")):
            missing = [_named(one) for one in _objects(target.get("dependsOn")) if not _holds(one, met)]
            unmet += missing
            if not missing:
                found.append(target)
    return found, unmet


def _unmapped(group: Mapping[str, Any], code: str) -> Iterator[Mapping[str, Any]]:
    rule = group.get("unmapped")
    if not isinstance(rule, dict):
        return
    relation = {"equivalence": "inexact", "relationship": str(rule.get("relationship", "related-to"))}
    if rule.get("mode") in ("provided", "use-source-code"):
        comment = "The code has no entry in the map; it stays as it was sent."
        yield {"code": code, "comment": comment, "own": True, **relation}
    elif rule.get("mode") == "fixed" and "code" in rule:
        yield {"code": rule["code"], "display": rule.get("display"), **relation}


def _holds(depends: Mapping[str, Any], met: Mapping[str, set[str]]) -> bool:
    value = depends.get("value")
    if value is None:
        value = next((v for key, v in depends.items() if key.startswith("value")), None)
    if isinstance(value, dict):
        value = value.get("code")
    return value in met.get(_named(depends), ())


def _named(depends: Mapping[str, Any]) -> str:
    return str(depends.get("property") or depends.get("attribute") or "")


def _dependencies(given: Given) -> Iterator[tuple[str, set[str]]]:
    """What the caller says: by R4 (element, concept) or R5 (attribute, value)."""
    found: dict[str, set[str]] = {}
    for held in given.get("dependency", ()):
        parts = parts_of(held)
        name = parts.get("element") or parts.get("attribute")
        value = parts.get("concept", parts.get("value"))
        if not isinstance(name, str) or value is None:
            said = "A dependency is an element with its concept (R4), or an attribute with its value (R5)."
            raise refusal(400, "required", "translate-dependency", said)
        found.setdefault(name, set()).update(_said(value))
    return iter(found.items())


def _said(value: Any) -> Iterator[str]:
    if isinstance(value, str):
        yield value
    if isinstance(value, dict):
        for coding in [value, *_objects(value.get("coding"))]:
            yield from (coding[key] for key in ("code", "text") if isinstance(coding.get(key), str))


def _match(match: Match, edition: Edition) -> Iterator[Part]:
    target = match.target
    fifth = edition == "R5"
    yield ("relationship", "code", match.relation) if fifth else ("equivalence", "code", match.relation)
    if "code" in target:
        system = match.group.get("source" if target.get("own") else "target")
        coding = {"system": system, "code": target["code"], "display": target.get("display")}
        yield "concept", "Coding", {name: value for name, value in coding.items() if value}
    for name in ("dependsOn", "product"):
        for held in _objects(target.get(name)):
            yield name, "part", list(_beside(held, fifth=fifth))
    source = f"{match.map['url']}|{match.map['version']}" if "version" in match.map else match.map["url"]
    yield ("originMap", "uri", source) if fifth else ("source", "uri", source)


def _beside(held: Mapping[str, Any], *, fifth: bool) -> Iterator[Part]:
    if fifth:
        yield "attribute", "uri", held["attribute"]
        yield from (("value", key[5:], value) for key, value in held.items() if key.startswith("value"))
        return
    yield "element", "uri", held["property"]
    coding = {"system": held.get("system"), "code": held["value"]}
    yield "concept", "Coding", {name: value for name, value in coding.items() if value}


def _objects(held: Any) -> list[Mapping[str, Any]]:
    return [one for one in held if isinstance(one, Mapping)] if isinstance(held, list) else []
