"""Resources out of a form whose items name the elements they fill (definition-based extraction).

Source: HL7 Structured Data Capture (SDC) 4.0.0, "Form data extraction", definition-based; the extensions
definitionExtract and definitionExtractValue. The resource that comes out replaces what was there before.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any, Final

from fhirgallop.conformance.registry import registry
from fhirgallop.observations.editions import Edition
from fhirgallop.observations.extract_plan import DEEPEST, mappings, values
from fhirgallop.outcome import Issue, Severity
from fhirgallop.service.fhir.form_elements import Draft, MisfitError
from fhirgallop.service.fhir.form_expressions import Answers, CannotJudge, ExpressionError, Item, written
from fhirgallop.service.fhir.form_walk import REQUEST, SDC, Ids, answered, extensions, iterations, parts

WAYS: Final = ("definitionExtract", "definitionExtractValue")
MOST_RESOURCES: Final = 1000

_EXTRACT, _VALUE = (SDC + way for way in WAYS)
_UNIT: Final = "http://hl7.org/fhir/StructureDefinition/questionnaire-unit"

Object = dict[str, Any]


def from_definitions(
    response: Object, questionnaire: Mapping[str, Any], edition: Edition
) -> tuple[list[Object], list[Issue]]:
    """The entries of a transaction that a form's definitions give, and everything noticed.

    An error among the issues means that what came out is not to be used.
    """
    making = _Making(response, edition)
    here = _Here(making.answers.whole, making.ids.named(questionnaire, "", {}), "Questionnaire", "")
    here = making.started(questionnaire, here)
    making.values(questionnaire, here)
    making.level(mappings(questionnaire.get("item")), response, here, 1)
    return [making.entry(one, number) for number, one in enumerate(making.opened)], making.issues


@dataclass(frozen=True, slots=True)
class _Opened:
    """A resource in the making, with what its request is to say."""

    draft: Draft
    given: Mapping[str, Any]
    here: _Here


@dataclass(frozen=True, slots=True)
class _Here:
    """Where in the form we are.

    Attributes:
        focus: what expressions start from.
        names: what variables stand for.
        link: the item, for messages.
        path: the way to it, repetitions included.
        drafts: the resources that items below fill, by canonical.
    """

    focus: Any
    names: Mapping[str, str]
    link: str
    path: str
    drafts: Mapping[str, Draft] = field(default_factory=dict)


class _Making:
    def __init__(self, response: Object, edition: Edition) -> None:
        self.answers = Answers(response, edition)
        self.ids = Ids(response)
        self.opened: list[_Opened] = []
        self.issues: list[Issue] = []
        self._known = registry(edition)

    def level(self, items: list[Mapping[str, Any]], within: Any, here: _Here, depth: int) -> None:
        """Every item of the form on one level, for each item of the response that answers it."""
        if depth > DEEPEST:
            self._note(
                "error", "too-long", "sdc-too-deep", f"Items are nested more than {DEEPEST} deep.", here
            )
            return
        for item in items:
            link = str(item.get("linkId", ""))
            for number, found in enumerate(answered(within, link)):
                place = f"{here.path}/{link}[{number}]"
                names = self.ids.named(item, place, here.names)
                for part, one in enumerate(iterations(found)):
                    own = _Here(self.answers.item(one), names, link, f"{place}({part})", here.drafts)
                    own = self.started(item, own)
                    own = self._filled(item, one, own)
                    self.values(item, own)
                    self.level(mappings(item.get("item")), one, own, depth + 1)

    def started(self, element: Mapping[str, Any], here: _Here) -> _Here:
        """The place, with the resources that an element of the form starts."""
        drafts = dict(here.drafts)
        for extension in extensions(element, _EXTRACT):
            given = parts(extension)
            canonical = str(given.get("definition", ""))
            draft = Draft.of(canonical, self._known)
            if draft is None:
                said = "The definition that a resource is to be made by is not known here."
                self._note("error", "not-found", "sdc-definition-unknown", said, here)
            elif len(self.opened) >= MOST_RESOURCES:
                said = f"A form gives at most {MOST_RESOURCES} resources."
                self._note("error", "too-costly", "sdc-too-many", said, here)
            else:
                drafts[canonical.partition("|")[0]] = draft
                self.opened.append(_Opened(draft, given, here))
        return replace(here, drafts=drafts)

    def _filled(self, item: Mapping[str, Any], answered_: Object, here: _Here) -> _Here:
        """Puts the answers of an item where its definition says; a group opens a new element there."""
        definition = item.get("definition")
        if not isinstance(definition, str) or not here.drafts:
            return here
        draft, path = self._target(definition, here)
        if draft is None:
            return here
        answers = mappings(answered_.get("answer"))
        if not answers:
            return self._grouped(draft, path, definition, here)
        units = [one for one in values(item, _UNIT, "valueCoding") if isinstance(one, Mapping)]
        for answer in answers:
            for key, held in answer.items():
                if key.startswith("value"):
                    self._put(draft, path, key.removeprefix("value"), held, units[0] if units else {}, here)
        return here

    def _grouped(self, draft: Draft, path: str, definition: str, here: _Here) -> _Here:
        try:
            opened = draft.within(path)
        except MisfitError as error:
            self._note("error", "structure", "sdc-definition-misfit", str(error), here)
            return here
        return replace(here, drafts={**here.drafts, definition.partition("#")[0].partition("|")[0]: opened})

    def values(self, element: Mapping[str, Any], here: _Here) -> None:
        """The fixed and computed values that an element of the form gives."""
        for extension in extensions(element, _VALUE):
            given = parts(extension)
            draft, path = self._target(str(given.get("definition", "")), here)
            if draft is None:
                continue
            for part in mappings(extension.get("extension")):
                if part.get("url") == "fixed-value":
                    for key, held in part.items():
                        if key.startswith("value"):
                            self._put(draft, path, key.removeprefix("value"), held, {}, here)
            expression = given.get("expression")
            text = expression.get("expression") if isinstance(expression, Mapping) else expression
            for found in self._evaluated(text, here) if isinstance(text, str) else ():
                kind = found.type_name if isinstance(found, Item) else _kind(found)
                self._put(draft, path, kind[:1].upper() + kind[1:], written(found), {}, here)

    def entry(self, opened: _Opened, number: int) -> Object:
        """The entry of one finished resource: PUT where it has an id, else POST."""
        resource = opened.draft.finished()
        type_, own = resource["resourceType"], resource.get("id")
        request: Object = {"method": "PUT" if own else "POST", "url": f"{type_}/{own}" if own else type_}
        for name in REQUEST:
            if word := self._word(opened.given.get(name), opened.here):
                request[name] = word
        full_url = self._word(opened.given.get("fullUrl"), opened.here)
        full_url = full_url or self.ids.of(f"{opened.here.path}!{number}")
        return {"fullUrl": full_url, "resource": resource, "request": request}

    def _target(self, definition: str, here: _Here) -> tuple[Draft | None, str]:
        canonical, _, path = definition.partition("#")
        draft = here.drafts.get(canonical.partition("|")[0])
        if draft is None:
            said = (
                "The definition is of no resource that is started here (definitionExtract); it fills nothing."
            )
            self._note("warning", "not-found", "sdc-definition-not-started", said, here)
        return draft, path

    def _put(
        self, draft: Draft, path: str, kind: str, held: Any, unit: Mapping[str, Any], here: _Here
    ) -> None:
        try:
            draft.put(path, kind, held, unit)
        except MisfitError as error:
            self._note("error", "structure", "sdc-definition-misfit", str(error), here)

    def _word(self, expression: Any, here: _Here) -> str:
        found = self._evaluated(expression, here) if isinstance(expression, str) else []
        word = written(found[0]) if found else None
        return str(word) if word is not None else ""

    def _evaluated(self, expression: str, here: _Here) -> list[Any]:
        try:
            return self.answers.found(expression, here.focus, here.names)
        except CannotJudge as error:
            said = f"An expression cannot be worked out: {error}."
            self._note("error", "processing", "sdc-expression", said, here)
        except ExpressionError:
            self._note("error", "value", "sdc-expression", "An expression is no FHIRPath.", here)
        return []

    def _note(self, severity: Severity, code: str, rule: str, text: str, here: _Here) -> None:
        self.issues.append(Issue(severity, code, rule, text, field=here.link[:64]))


def _kind(value: Any) -> str:
    """FHIR type of a value that an expression worked out."""
    plain = written(value)
    if isinstance(plain, bool):
        return "boolean"
    if isinstance(plain, str):
        return "string"
    if isinstance(plain, dict):
        return "Quantity"
    return "integer" if isinstance(plain, int) else "decimal"
