"""What a Questionnaire says of extracting Observations from its answers, worked out once for each item.

Source: HL7 Structured Data Capture (SDC) 4.0.0, "Form data extraction", observation-based; the extensions
observationExtract (boolean, or a relationship to the parent's Observation) and observation-extract-category.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Final

from fhirgallop.outcome import Issue, Severity

_SDC: Final = "http://hl7.org/fhir/uv/sdc/StructureDefinition/sdc-questionnaire-"
_CORE: Final = "http://hl7.org/fhir/StructureDefinition/"
_EXTRACT: Final = _SDC + "observationExtract"
_CATEGORY: Final = _SDC + "observation-extract-category"
_IS_SUBJECT: Final = _SDC + "isSubject"
_UNIT: Final = _CORE + "questionnaire-unit"
_OTHER_WAYS: Final = tuple(
    _SDC + name
    for name in (
        "itemExtractionContext", "targetStructureMap", "definitionExtract", "definitionExtractValue",
        "templateExtract", "templateExtractBundle",
    )
)  # fmt: skip
_CODING: Final = ("system", "version", "code", "display")
RELATIONS: Final = ("independent", "component", "member", "derived")
DEEPEST: Final = 32


@dataclass(frozen=True, slots=True)
class Plan:
    """How the answers of one item become Observations.

    Attributes:
        relation: independent, component, member or derived; empty when the item is not extracted.
        codings: Codings of Observation.code; without any nothing is extracted.
        categories: CodeableConcepts of Observation.category, from the nearest level that has any.
        unit: Coding of questionnaire-unit; empty when the answer has its own unit or none.
        text: the question as written.
    """

    relation: str = ""
    codings: tuple[Mapping[str, Any], ...] = ()
    categories: tuple[Mapping[str, Any], ...] = ()
    unit: Mapping[str, Any] = field(default_factory=dict)
    text: str = ""


def plans(
    questionnaire: Mapping[str, Any], beside: Collection[str] = ()
) -> tuple[dict[str, Plan], list[Issue]]:
    """The plan of every item by linkId, and what is wrong with the form or not supported in it.

    The ways of extraction in `beside` are seen to elsewhere.
    """
    planner = _Planner(beside)
    relation = planner.relation(questionnaire, "Questionnaire", "")
    categories = _categories(questionnaire)
    planner.other_ways(questionnaire, "Questionnaire")
    planner.level(questionnaire.get("item"), relation, categories, 1)
    return planner.found, planner.issues


class _Planner:
    def __init__(self, beside: Collection[str]) -> None:
        self._beside = beside
        self.found: dict[str, Plan] = {}
        self.issues: list[Issue] = []

    def level(self, items: Any, relation: str, categories: tuple[Mapping[str, Any], ...], depth: int) -> None:
        """Every item of one level; `relation` and `categories` are those of the level above."""
        if depth > DEEPEST:
            self._note("error", "too-long", "sdc-too-deep", f"Items are nested more than {DEEPEST} deep.", "")
            return
        known = [item for item in mappings(items) if isinstance(item.get("linkId"), str)]
        if any(value is True for item in known for value in values(item, _IS_SUBJECT, "valueBoolean")):
            text = "A group with its own subject (isSubject) cannot be extracted; make it a form of its own."
            self._note("error", "not-supported", "sdc-subject-of-its-own", text, "")
            relation = ""
        for item in known:
            link = item["linkId"]
            own = self.relation(item, link, relation)
            own_categories = _categories(item) or categories
            self.other_ways(item, link)
            self.found[link] = self._plan(item, link, own, own_categories)
            self.level(item.get("item"), own, own_categories, depth + 1)

    def relation(self, element: Mapping[str, Any], link: str, inherited: str) -> str:
        """What the element's own flag says, else what it inherits; empty for no extraction."""
        flags = _flags(element)
        if not flags:
            return inherited
        if len(flags) > 1 or any(flag not in (True, False, *RELATIONS) for flag in flags):
            text = "observationExtract is given twice, or is no boolean and no known relation; correct it."
            self._note("error", "invalid", "sdc-bad-flag", text, link)
            return ""
        return {True: "independent", False: ""}.get(flags[0], str(flags[0]))

    def _plan(
        self, item: Mapping[str, Any], link: str, relation: str, categories: tuple[Mapping[str, Any], ...]
    ) -> Plan:
        codes = mappings(item.get("code"))
        flagged = [(code, self.relation(code, link, "")) for code in codes if _flags(code)]
        chosen = [code for code, own in flagged if own]
        if chosen:
            relations = {own for _, own in flagged if own}
            of_item = any(isinstance(flag, bool) for flag in _flags(item))
            if len(relations) > 1 or (relations != {"independent"} and of_item):
                text = "observationExtract mixes true or false and relations within one item; use one kind."
                self._note("error", "invalid", "sdc-mixed-flags", text, link)
                return Plan()
            relation = relations.pop() if relations != {"independent"} or not relation else relation
        else:
            chosen = [code for code in codes if not any(code is refused for refused, _ in flagged)]
        if item.get("type") == "display" and _flags(item):
            text = "An item of type display has no answer to extract; take the flag away (sdc-obsn-1)."
            self._note("error", "invariant", "sdc-obsn-1", text, link)
        units = [unit for unit in values(item, _UNIT, "valueCoding") if isinstance(unit, Mapping)]
        question = item.get("text")
        return Plan(
            relation,
            tuple({key: code[key] for key in _CODING if key in code} for code in chosen),
            categories,
            units[0] if units else {},
            question if isinstance(question, str) else "",
        )

    def other_ways(self, element: Mapping[str, Any], link: str) -> None:
        """Names the ways of extraction that are asked for and not supported."""
        for extension in mappings(element.get("extension")):
            if extension.get("url") in _OTHER_WAYS:
                name = str(extension["url"]).rpartition("sdc-questionnaire-")[2]
                if name in self._beside:
                    continue
                text = f"Extraction by {name} is not supported; only the observation-based way is."
                self._note("warning", "not-supported", "sdc-way-not-supported", text, link)
        if mappings(element.get("modifierExtension")):
            text = "A modifier extension may change the meaning of the form; nothing is extracted."
            self._note("error", "not-supported", "sdc-modifier", text, link)

    def _note(self, severity: Severity, code: str, rule: str, text: str, link: str) -> None:
        self.issues.append(Issue(severity, code, rule, text, field=link[:64]))


def mappings(value: Any) -> list[Mapping[str, Any]]:
    """The objects of a list; none when it is no list."""
    return [item for item in value if isinstance(item, Mapping)] if isinstance(value, Sequence) else []


def values(element: Mapping[str, Any], url: str, *keys: str) -> list[Any]:
    """Values of the extensions of one address."""
    found = (e for e in mappings(element.get("extension")) if e.get("url") == url)
    return [extension[key] for extension in found for key in keys if key in extension]


def _flags(element: Mapping[str, Any]) -> list[Any]:
    return values(element, _EXTRACT, "valueBoolean", "valueCode")


def _categories(element: Mapping[str, Any]) -> tuple[Mapping[str, Any], ...]:
    return tuple(c for c in values(element, _CATEGORY, "valueCodeableConcept") if isinstance(c, Mapping))
