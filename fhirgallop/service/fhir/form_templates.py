"""Resources out of a form that contains templates of them (template-based extraction).

Source: HL7 Structured Data Capture (SDC) 4.0.0, "Form data extraction", template-based; the extensions
templateExtract, templateExtractBundle, templateExtractContext, templateExtractValue and extractAllocateId.
Names given to contexts are not served; that is an error, not passed over.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any, Final

from fhirgallop.observations.editions import Edition
from fhirgallop.observations.extract_plan import DEEPEST, mappings
from fhirgallop.outcome import Issue
from fhirgallop.service.fhir.form_expressions import Answers, CannotJudge, ExpressionError, written
from fhirgallop.service.fhir.form_walk import REQUEST, SDC, Ids, answered, iterations, parts, value

WAYS: Final = ("templateExtract", "templateExtractBundle")
MOST_RESOURCES: Final = 1000
MOST_ELEMENTS: Final = 50_000

_EXTRACT, _BUNDLE = (SDC + way for way in WAYS)
_CONTEXT: Final = SDC + "templateExtractContext"
_VALUE: Final = SDC + "templateExtractValue"

Object = dict[str, Any]


def from_templates(
    response: Object, questionnaire: Mapping[str, Any], edition: Edition
) -> tuple[list[Object], list[Issue]]:
    """The entries of a transaction that a form's templates give, and everything noticed.

    An error among the issues means that what came out is not to be used.
    """
    making = _Making(response, questionnaire, edition)
    names = making.ids.named(questionnaire, "", {})
    making.extracted(questionnaire, "Questionnaire", making.answers.whole, names, "")
    making.level(mappings(questionnaire.get("item")), response, names, "", 1)
    return making.entries, making.issues


@dataclass(frozen=True, slots=True)
class _Place:
    """Where a template is filled in: from which focus, with which names, for which item of the form."""

    focus: Any
    names: Mapping[str, str]
    link: str


class _Making:
    def __init__(self, response: Object, questionnaire: Mapping[str, Any], edition: Edition) -> None:
        self.answers = Answers(response, edition)
        self.entries: list[Object] = []
        self.issues: list[Issue] = []
        self._templates = {
            f"#{held['id']}": held
            for held in mappings(questionnaire.get("contained"))
            if isinstance(held.get("id"), str) and isinstance(held.get("resourceType"), str)
        }
        self.ids = Ids(response)
        self._elements = 0

    def level(
        self, items: list[Mapping[str, Any]], within: Any, names: Mapping[str, str], path: str, depth: int
    ) -> None:
        """Every item of the form on one level, for each item of the response that answers it."""
        if depth > DEEPEST:
            self._note("too-long", "sdc-too-deep", f"Items are nested more than {DEEPEST} deep.", "")
            return
        for item in items:
            link = str(item.get("linkId", ""))
            for number, one_item in enumerate(answered(within, link)):
                here = f"{path}/{link}[{number}]"
                own = self.ids.named(item, here, names)
                for part, one in enumerate(iterations(one_item)):
                    self.extracted(item, link, self.answers.item(one), own, f"{here}({part})")
                self.level(mappings(item.get("item")), one_item, own, here, depth + 1)

    def extracted(
        self, element: Mapping[str, Any], link: str, focus: Any, names: Mapping[str, str], path: str
    ) -> None:
        """The resources whose templates an element of the form names."""
        place = _Place(focus, names, link)
        for number, extension in enumerate(mappings(element.get("extension"))):
            if extension.get("url") == _BUNDLE:
                for filled in self._filled(self._template(extension.get("valueReference"), link), place):
                    self.entries += [dict(entry) for entry in mappings(filled.get("entry"))]
            elif extension.get("url") == _EXTRACT:
                given = parts(extension)
                for copy, filled in enumerate(
                    self._filled(self._template(given.get("template"), link), place)
                ):
                    self._entry(filled, given, place, f"{path}#{number}.{copy}")
        if len(self.entries) > MOST_RESOURCES:
            self.entries = []
            self._note(
                "too-costly", "sdc-too-many", f"A form gives at most {MOST_RESOURCES} resources.", link
            )

    def _template(self, reference: Any, link: str) -> Mapping[str, Any] | None:
        named = reference.get("reference") if isinstance(reference, Mapping) else reference
        found = self._templates.get(str(named))
        if found is None:
            self._note("not-found", "sdc-no-template", "The template is not contained in the form.", link)
        return found

    def _filled(self, template: Mapping[str, Any] | None, place: _Place) -> Iterator[Object]:
        if template is None:
            return
        bare = {key: value for key, value in template.items() if key != "id"}
        for filled in self._object(bare, str(template["resourceType"]), place):
            if isinstance(filled, dict) and filled.keys() - {"resourceType"}:
                yield filled

    def _entry(self, resource: Object, given: Mapping[str, Any], place: _Place, path: str) -> None:
        """One entry of the transaction: PUT where the resource has an id, else POST."""
        type_ = resource["resourceType"]
        own = self._word(given.get("resourceId"), place)
        if own:
            resource = {"resourceType": type_, "id": own, **resource}
        url = f"{type_}/{own}" if own else type_
        request: Object = {"method": "PUT" if own else "POST", "url": url}
        for name in REQUEST:
            if word := self._word(given.get(name), place):
                request[name] = word
        full_url = self._word(given.get("fullUrl"), place)
        full_url = full_url or self.ids.of(path)
        self.entries.append({"fullUrl": full_url, "resource": resource, "request": request})

    def _word(self, expression: Any, place: _Place) -> str:
        if not isinstance(expression, str):
            return ""
        found = self._evaluated(expression, place.focus, place)
        word = written(found[0]) if found else None
        return str(word) if word is not None else ""

    def _object(self, template: Mapping[str, Any], type_: str, place: _Place) -> list[Any]:
        """The element once for each result of its own context and value; none where there is no result."""
        self._elements += 1
        if self._elements > MOST_ELEMENTS:
            if self._elements == MOST_ELEMENTS + 1:
                said = f"The templates give more than {MOST_ELEMENTS} elements; send less at a time."
                self._note("too-costly", "sdc-too-many", said, place.link)
            return []
        rest, contexts, replacing = _split(template)
        made: list[Any] = []
        for focus in self._contexts(contexts, place):
            here = _Place(focus, place.names, place.link)
            if replacing is None:
                made.append(self._children(rest, type_, here))
                continue
            for result in self._evaluated(replacing, focus, place):
                value = written(result)
                children = self._children(rest, type_, here)
                made.append({**children, **value} if isinstance(value, dict) else value)
        return [one for one in made if one not in ({}, None)]

    def _children(self, template: Mapping[str, Any], type_: str, place: _Place) -> Object:
        made: Object = {}
        type_ = str(template.get("resourceType", type_))
        for key, held in template.items():
            if key.startswith("_"):
                if key[1:] not in template:
                    made |= self._primitive(key[1:], None, held, type_, place)
                continue
            if f"_{key}" in template:
                made |= self._primitive(key, held, template[f"_{key}"], type_, place)
                continue
            child = self.answers.definitions.child(type_, key)
            inner = child.type_name if child else ""
            if isinstance(held, list):
                filled = [one for part in held for one in self._part(part, inner, place)]
                if filled:
                    made[key] = filled
            elif isinstance(held, dict):
                several = self._object(held, inner, place)
                self._put(made, key, several, many=bool(child and child.element.many), place=place)
            else:
                made[key] = held
        return made

    def _part(self, held: Any, type_: str, place: _Place) -> list[Any]:
        return self._object(held, type_, place) if isinstance(held, dict) else [held]

    def _primitive(self, key: str, held: Any, beside: Any, type_: str, place: _Place) -> Object:
        """A primitive whose companion may say where its value comes from."""
        child = self.answers.definitions.child(type_, key)
        many = bool(child and child.element.many)
        companions = beside if isinstance(beside, list) else [beside]
        own = held if isinstance(held, list) else [held]
        made: Object = {}
        results: list[Any] = []
        for number, companion in enumerate(companions):
            kept = own[number] if number < len(own) else None
            if not isinstance(companion, dict):
                results += [] if kept is None else [kept]
                continue
            _, contexts, replacing = _split(companion)
            if replacing is None and not contexts:
                return {key: held, f"_{key}": beside} if held is not None else {f"_{key}": beside}
            for focus in self._contexts(contexts, place):
                if replacing is None:
                    results += [] if kept is None else [kept]
                    continue
                results += [written(result) for result in self._evaluated(replacing, focus, place)]
        self._put(made, key, [one for one in results if one is not None], many=many, place=place)
        return made

    def _put(self, made: Object, key: str, results: list[Any], *, many: bool, place: _Place) -> None:
        if not results:
            return
        if not many and len(results) > 1:
            said = "An element that may stand once gets several values; narrow its expression."
            self._note("structure", "sdc-several-values", said, place.link)
        made[key] = results if many else results[0]

    def _contexts(self, expressions: list[str], place: _Place) -> list[Any]:
        found = [place.focus]
        for expression in expressions:
            found = [one for focus in found for one in self._evaluated(expression, focus, place)]
        return found

    def _evaluated(self, expression: str, focus: Any, place: _Place) -> list[Any]:
        try:
            return self.answers.found(expression, focus, place.names)
        except CannotJudge as error:
            self._note(
                "processing", "sdc-expression", f"An expression cannot be worked out: {error}.", place.link
            )
        except ExpressionError:
            self._note("value", "sdc-expression", "An expression of a template is no FHIRPath.", place.link)
        return []

    def _note(self, code: str, rule: str, text: str, link: str) -> None:
        self.issues.append(Issue("error", code, rule, text, field=link[:64]))


def _split(template: Mapping[str, Any]) -> tuple[Object, list[str], str | None]:
    """An element without the extensions of this way, its contexts, and what replaces it."""
    contexts: list[str] = []
    replacing: str | None = None
    kept: list[Any] = []
    for extension in mappings(template.get("extension")):
        expression = value(extension)
        if isinstance(expression, Mapping):  # R4 allows an Expression here; its name is not served
            expression = "%unsupported" if "name" in expression else expression.get("expression")
        if extension.get("url") == _CONTEXT:
            contexts.append(str(expression))
        elif extension.get("url") == _VALUE:
            replacing = str(expression)
        else:
            kept.append(extension)
    rest = {key: value for key, value in template.items() if key != "extension"}
    if kept:
        rest = {"extension": kept, **rest}
    return rest, contexts, replacing
