"""A data dictionary: what a table of fields, or a FHIR Questionnaire, says of each field of a form.

Sources: FHIR R4 and R5 Questionnaire (item, answerOption), and the extension questionnaire-unit. Names of a
table's columns are common practice, no source.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any, Final

from fhirgallop.codes import fhirjson
from fhirgallop.intake.detect import open_records
from fhirgallop.intake.limits import DEFAULT
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping.wordings import words_of
from fhirgallop.outcome import Issue, has_errors

_MOST: Final = 5_000
_MOST_VALUES: Final = 200
_UNIT: Final = "http://hl7.org/fhir/StructureDefinition/questionnaire-unit"
_COLUMNS: Final[Mapping[str, frozenset[str]]] = {
    "name": frozenset({"name", "field", "field name", "fieldname", "variable", "column", "id", "feld"}),
    "label": frozenset(
        {"label", "field label", "question", "description", "text", "wording", "meaning", "bezeichnung"}
    ),
    "values": frozenset(
        {"values", "choices", "options", "answers", "allowed values", "codes", "coding", "werte"}
    ),
    "unit": frozenset({"unit", "units", "einheit"}),
    "section": frozenset({"section", "group", "form", "page", "heading", "abschnitt"}),
}
_NO_NAME: Final = Issue(
    "error",
    "structure",
    "dictionary-no-name",
    "No column of the table names the fields; head it `name`, and the others label, values, unit, section.",
)


@dataclass(frozen=True, slots=True)
class Described:
    """One field: `values` are pairs of what a record holds and what that stands for (perhaps empty)."""

    name: str
    label: str = ""
    section: str = ""
    unit: str = ""
    values: tuple[tuple[str, str], ...] = ()


def read_dictionary(content: bytes, media_type: str) -> tuple[list[Described], list[Issue]]:
    """The fields that a table, or a Questionnaire, describes; and what is wrong with it."""
    if media_type.endswith("json"):
        value, issues = fhirjson.read(content, max_bytes=DEFAULT.list_bytes)
        if has_errors(issues):
            return [], list(issues)
        if isinstance(value, Mapping) and value.get("resourceType") == "Questionnaire":
            return list(_items(value)), list(issues)
    found: dict[str, Described] = {}
    issues_: list[Issue] = []
    for read in open_records(content, content_type=media_type):
        issues_ += read.issues
        if isinstance(read, LocalRecord) and len(found) < _MOST:
            row = _row(read)
            if row.name:
                found.setdefault(row.name, row)
    if not found and not has_errors(issues_):
        issues_.append(_NO_NAME)
    return list(found.values()), [issue for issue in issues_ if issue.rule != "record-repeated"]


def is_questionnaire(content: bytes) -> bool:
    """Whether a JSON text is a FHIR Questionnaire, which describes a form and holds no record."""
    value, issues = fhirjson.read(content, max_bytes=DEFAULT.list_bytes)
    return (
        not has_errors(issues) and isinstance(value, Mapping) and value.get("resourceType") == "Questionnaire"
    )


def _row(record: LocalRecord) -> Described:
    told: dict[str, str] = {}
    for name, held in record.fields.items():
        for what, heads in _COLUMNS.items():
            if name.strip().casefold() in heads and held.values:
                told.setdefault(what, ", ".join(words_of(value) for value in held.values).strip())
    name = told.get("name", "")
    return Described(
        name, told.get("label", ""), told.get("section", ""), told.get("unit", ""),
        tuple(_values(told.get("values", ""))),
    )  # fmt: skip


def _values(text: str) -> Iterator[tuple[str, str]]:
    """`1=yes; 2=no`, `1, yes | 2, no`, `yes | no`, `yes, no`."""
    sign = next((sign for sign in ("|", ";", "\n") if sign in text), ",")
    parts = [part.strip() for part in text.split(sign) if part.strip()]
    for part in parts[:_MOST_VALUES]:
        pair = re.fullmatch(r"([^=:,]{1,40})[=:,](.{1,200})", part)
        if pair and (sign != "," or "," not in part):
            yield pair[1].strip(), pair[2].strip()
        else:
            yield part, ""


def _items(form: Mapping[str, Any]) -> Iterator[Described]:
    waiting: list[tuple[Any, str, int]] = [(form.get("item"), "", 1)]
    count = 0
    while waiting:
        level, section, depth = waiting.pop(0)
        for item in level if isinstance(level, list) and depth <= DEFAULT.depth else ():
            if not isinstance(item, Mapping) or not isinstance(item.get("linkId"), str):
                continue
            text = item.get("text") if isinstance(item.get("text"), str) else ""
            if item.get("type") not in ("group", "display") and count < _MOST:
                count += 1
                yield Described(
                    item["linkId"], text or "", section, _unit(item), tuple(_options(item))[:_MOST_VALUES]
                )
            waiting.append((item.get("item"), text or section, depth + 1))


def _options(item: Mapping[str, Any]) -> Iterator[tuple[str, str]]:
    if item.get("type") == "boolean":
        yield from (("true", "yes"), ("false", "no"))
    options = item.get("answerOption")
    for option in options if isinstance(options, list) else ():
        if not isinstance(option, Mapping):
            continue
        coding = option.get("valueCoding")
        if isinstance(coding, Mapping):
            code, display = coding.get("code"), coding.get("display")
            if isinstance(display, str):
                yield display, ""
            elif isinstance(code, str):
                yield code, ""
        else:
            for key in ("valueString", "valueInteger", "valueDate", "valueTime"):
                if key in option:
                    yield str(option[key]), ""


def _unit(item: Mapping[str, Any]) -> str:
    extensions = item.get("extension")
    for one in extensions if isinstance(extensions, list) else ():
        if isinstance(one, Mapping) and one.get("url") == _UNIT:
            coding = one.get("valueCoding")
            code = coding.get("code") if isinstance(coding, Mapping) else None
            return code if isinstance(code, str) else ""
    return ""
