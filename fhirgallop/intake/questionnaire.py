"""FHIR QuestionnaireResponse: each answered item is one field named by its linkId.

Source: FHIR R4, R4B and R5 QuestionnaireResponse and Questionnaire. The editions agree on what is read here,
but for R5 having several identifiers and the item types `coding` and `question`.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterator, Mapping
from decimal import Decimal
from typing import Any, Final

from fhirgallop.codes import fhirjson, systems
from fhirgallop.intake.form import Form, index
from fhirgallop.intake.limits import DEFAULT, Limits
from fhirgallop.intake.reading import Reading
from fhirgallop.intake.record import Amount, Coded, Field, Header, LocalRecord, Status, Value
from fhirgallop.outcome import Issue, Severity, has_errors

STATUS: Final[Mapping[str, Status]] = {
    "completed": "final",
    "amended": "amended",
    "in-progress": "preliminary",
    "entered-in-error": "entered-in-error",
    "stopped": "preliminary",
}
_TEXT_KEYS: Final = ("valueString", "valueDate", "valueDateTime", "valueTime", "valueUri")
_NOT_CARRIED: Final = ("valueAttachment", "valueReference")


def read_response(
    response: bytes | str | Mapping[str, Any],
    *,
    questionnaire: Mapping[str, Any] | None = None,
    source: str = "",
    limits: Limits = DEFAULT,
) -> Reading:
    """The examination that a form's answers are.

    A field of a group, item or answer that repeats gets its place among the repeats, `linkId[1]`, from the
    second on; within several repeating levels all places, `linkId[0][1]`.

    Args:
        response: the resource, as JSON text or read already.
        questionnaire: the form; where given, unknown items, wrong and missing answers are issues.
        source: file name, for issues.
        limits: bounds.
    """
    issues: list[Issue] = []
    value: Any = response
    if isinstance(response, (bytes, str)):
        value, issues = fhirjson.read(response, max_bytes=limits.record_bytes, source=source)
        if has_errors(issues):
            return Reading(issues=tuple(issues))
    if not isinstance(value, Mapping) or value.get("resourceType") != "QuestionnaireResponse":
        text = "This is no FHIR QuestionnaireResponse; send one, or plain JSON without resourceType."
        issues.append(Issue("fatal", "structure", "form-not-a-response", text, source=source))
        return Reading(issues=tuple(issues))
    form = None if questionnaire is None else index(questionnaire, limits)
    reader = _Reader(source, limits, form, issues)
    header = reader.header(value)
    reader.items(value.get("item"), (), 1)
    if form is not None:
        reader.judge(value, form)
    if has_errors(issues):
        return Reading(issues=tuple(issues))
    return Reading(
        (LocalRecord("questionnaire-response", reader.fields, header, source, issues=tuple(issues)),)
    )


class _Reader:
    """Gathers the fields of one response, and all that is wrong with them."""

    def __init__(self, source: str, limits: Limits, form: Form | None, issues: list[Issue]) -> None:
        self.fields: dict[str, Field] = {}
        self._source = source
        self._limits = limits
        self._form = form
        self._issues = issues
        self._seen: set[str] = set()
        self._answered: set[str] = set()

    def _note(self, severity: Severity, code: str, rule: str, text: str, field: str = "") -> None:
        self._issues.append(Issue(severity, code, rule, text, field=field[:64], source=self._source))

    def header(self, response: Mapping[str, Any]) -> Header:
        """What the response says of the whole examination."""
        status = response.get("status")
        if not isinstance(status, str) or status not in STATUS:
            text = "The status is missing or none that a form can have; send completed for a signed one."
            self._note("error", "required", "form-status", text, "status")
        elif status == "stopped":
            text = "The form was stopped before its end; the examination is taken as preliminary."
            self._note("warning", "incomplete", "form-stopped", text, "status")
        authored = response.get("authored")
        return Header(
            patient=_party(response.get("subject")),
            encounter=_party(response.get("encounter")),
            time=authored if isinstance(authored, str) else "",
            examiner=_party(response.get("author")),
            identifier=_identifier(response),
            status=STATUS.get(status, "") if isinstance(status, str) else "",
        )

    def items(self, items: Any, places: tuple[int, ...], depth: int) -> None:
        """Every item of a list; `places` are the places of the repeating groups and answers around it."""
        if items is None:
            return
        if depth > self._limits.depth:
            text = f"Items are nested more than {self._limits.depth} deep; flatten the form."
            self._note("error", "too-long", "form-too-deep", text)
            return
        if not isinstance(items, list):
            self._note("error", "structure", "form-not-a-list", "An item or answer is no list; correct it.")
            return
        known = [item for item in items if isinstance(item, Mapping) and isinstance(item.get("linkId"), str)]
        if len(known) < len(items):
            text = "An item has no linkId; each needs the one of its question."
            self._note("error", "required", "form-no-link", text)
        counts = Counter(item["linkId"] for item in known)
        place: Counter[str] = Counter()
        for item in known:
            link = item["linkId"]
            here = (*places, place[link]) if counts[link] > 1 else places
            place[link] += 1
            self._item(item, link, here, depth)

    def _item(self, item: Mapping[str, Any], link: str, places: tuple[int, ...], depth: int) -> None:
        self._seen.add(link)
        if self._form and link not in self._form.items:
            text = "The form has no item with this linkId; correct it, or send the form's right version."
            self._note("error", "not-found", "form-unknown-link", text, link)
        answers = item.get("answer", [])
        if not isinstance(answers, list) or not all(isinstance(answer, Mapping) for answer in answers):
            self._note(
                "error", "structure", "form-not-a-list", "The answer is no list of objects; correct it.", link
            )
            return
        if answers or "item" not in item:
            values = tuple(self._values(answers, link))
            if answers:
                self._answered.add(link)
            if values or not any(key in answer for answer in answers for key in _NOT_CARRIED):
                self._add(link, places, values)
        self.items(item.get("item"), places, depth + 1)
        for number, answer in enumerate(answers):
            if "item" in answer:
                self.items(answer["item"], (*places, number) if len(answers) > 1 else places, depth + 1)

    def _add(self, link: str, places: tuple[int, ...], values: tuple[Value, ...]) -> None:
        name = link + ("".join(f"[{place}]" for place in places) if any(places) else "")
        if name in self.fields:
            text = "This linkId occurs in several places of the response; give each question its own."
            self._note("error", "duplicate", "form-repeated-link", text, name)
        elif len(self.fields) >= self._limits.fields:
            if not any(issue.rule == "record-too-many-fields" for issue in self._issues):
                text = f"The response has more than {self._limits.fields:,} items; send one examination."
                self._note("error", "too-long", "record-too-many-fields", text)
        elif not link or len(name) > self._limits.name:
            text = f"A linkId is empty or longer than {self._limits.name} characters; shorten it."
            self._note("error", "too-long", "record-bad-name", text, name)
        else:
            self.fields[name] = Field(name, values)

    def _values(self, answers: list[Mapping[str, Any]], link: str) -> Iterator[Value]:
        for answer in answers:
            keys = [key for key in answer if key.startswith("value")]
            if len(keys) != 1:
                severity: Severity = "error" if keys else "warning"
                text = "An answer has no value, or several; send one value in each answer."
                self._note(severity, "structure", "form-answer-value", text, link)
                continue
            if self._form and link in self._form.items and keys[0] not in self._form.items[link].answers:
                kind = self._form.items[link].type
                text = f"The answer is {keys[0]} and the question asks for {kind}; send what it asks for."
                self._note("error", "value", "form-answer-type", text, link)
            value = self._value(keys[0], answer[keys[0]], link)
            if value is not None:
                yield value

    def _value(self, key: str, value: Any, link: str) -> Value | None:
        """The value of an answer; None when it is blank, or cannot be taken along."""
        match key, value:
            case "valueBoolean", bool():
                return value
            case (("valueDecimal" | "valueInteger"), _) if (number := _number(value)) is not None:
                return number
            case "valueQuantity", Mapping():
                return self._quantity(value, link)
            case "valueCoding", Mapping():
                parts = [value.get(part, "") for part in ("code", "display", "system")]
                if all(isinstance(part, str) for part in parts):
                    return Coded(*parts) if parts[0] or parts[1] else None
            case _, str() if key in _TEXT_KEYS and len(value) <= self._limits.text:
                return value if value.strip() else None
            case _ if key in _NOT_CARRIED:
                text = f"An answer with {key} is not read. Ask for text, a choice or a number."
                self._note("warning", "not-supported", "form-answer-not-read", text, link)
                return None
        text = f"The answer is no valid {key[:24]}, or too long; correct it."
        self._note("error", "value", "form-answer-invalid", text, link)
        return None

    def _quantity(self, value: Mapping[str, Any], link: str) -> Value | None:
        number, comparator = _number(value.get("value")), value.get("comparator", "")
        ucum = value.get("system") == systems.UCUM and value.get("code")
        unit = ucum or value.get("unit") or value.get("code") or ""
        if number is None:
            text = "A quantity has no number; send its value as a JSON number."
            self._note("error", "value", "form-answer-invalid", text, link)
            return None
        if not isinstance(unit, str) or comparator not in ("", "<", "<=", ">=", ">"):
            text = "A quantity's unit is no text, or its comparator none of < <= >= >; correct it."
            self._note("error", "value", "form-answer-invalid", text, link)
            return None
        return Amount(number, unit, comparator)

    def judge(self, response: Mapping[str, Any], form: Form) -> None:
        """What the form demands of the whole response."""
        named = response.get("questionnaire")
        if form.url and isinstance(named, str) and named.partition("|")[0] != form.url:
            text = (
                "The response names another form than the one it is read with; give the form that it names."
            )
            self._note("warning", "conflict", "form-other", text, "questionnaire")
        for link, item in form.items.items():
            if not item.required or link in self._answered or (item.type == "group" and link in self._seen):
                continue
            if item.parent and item.parent not in self._seen:
                continue
            if item.conditional:
                text = "This required item is not answered; whether the form shows it was not worked out."
                self._note("information", "incomplete", "form-required-conditional", text, link)
            else:
                text = "The form requires an answer here; complete the form."
                self._note("error", "required", "form-required", text, link)


def _party(reference: Any) -> str:
    """Identifier of a person or visit: the business identifier, else the id at the end of the reference."""
    if not isinstance(reference, Mapping):
        return ""
    identifier = reference.get("identifier")
    if isinstance(identifier, Mapping) and isinstance(identifier.get("value"), str):
        return str(identifier["value"])
    written = reference.get("reference")
    return written.partition("/_history/")[0].rpartition("/")[2] if isinstance(written, str) else ""


def _identifier(response: Mapping[str, Any]) -> str:
    written = response.get("identifier")
    first = written[0] if isinstance(written, list) and written else written
    value = first.get("value") if isinstance(first, Mapping) else None
    own = value or response.get("id")
    return own if isinstance(own, str) else ""


def _number(value: object) -> Decimal | None:
    """A number as it was written, None for what is none; a float comes from a program, not our reader."""
    if isinstance(value, float):
        return Decimal(repr(value)) if math.isfinite(value) else None
    return Decimal(value) if isinstance(value, (int, Decimal)) and not isinstance(value, bool) else None
