"""A template map as a FHIR ConceptMap: from a clinic's fields and wordings to our findings and answers.

A field name means a finding; a wording means an answer, in its field only, which it names as what it depends
on. What a line says besides (the side, the site) is a product of the target. Nothing is said of the reverse.
Source: FHIR R4 and R5 ConceptMap. R4 `equivalence` is read from the source: "wider" says that the target
means more than the source; R5 says the same as "source-is-narrower-than-target".
"""

from __future__ import annotations

import hashlib
import re
from collections.abc import Iterator, Mapping
from typing import Any, Final
from urllib.parse import quote

from fhirgallop.codes import systems
from fhirgallop.exam import catalogue
from fhirgallop.exam.presence import Presence
from fhirgallop.mapping.template_map import ChoiceList, Line, Meaning, QualifierSource, TemplateMap
from fhirgallop.observations.editions import Edition
from fhirgallop.observations.provenance import TEMPLATE_MAP
from fhirgallop.observations.text import code

FIELD_PROPERTY: Final = f"{TEMPLATE_MAP}/field"
FIELD_ATTRIBUTE: Final = "field"

_NOT_ID: Final = re.compile(r"[^A-Za-z0-9\-.]+", re.ASCII)
_PRESENCE: Final = "presence"
_NOTHING: Final = "This wording says nothing of the finding."
_SEVERAL: Final = "The box names findings; each of its wordings is one."
_BESIDE: Final = "The line says more beside: see the products."

Row = dict[str, Any]


def concept_map(template: TemplateMap, edition: Edition, first_used: str = "") -> dict[str, Any]:
    """The ConceptMap of one version of a template map.

    Args:
        template: the map.
        edition: FHIR edition to write it in.
        first_used: FHIR instant since when it is known here; empty when that is not known.
    """
    rows = _Rows(template, edition)
    for line in template.lines:
        rows.add(line)
    found: dict[str, Any] = {
        "resourceType": "ConceptMap",
        "id": map_id(template.name, template.version),
        "url": map_url(template.name),
        "version": template.version,
        "name": "Map_" + hashlib.sha256(template.name.encode()).hexdigest()[:16],
        "title": template.title or template.name,
        "status": "active",
        **({"date": first_used} if first_used else {}),
        "description": f"Template map {template.name}, version {template.version}, as a ConceptMap.",
    }
    if edition == "R5":
        found["additionalAttribute"] = rows.attributes()
    found["group"] = rows.groups()
    return found


def map_url(name: str) -> str:
    """Canonical address of a template map as a ConceptMap."""
    return f"{systems.BASE}/ConceptMap/{quote(name, safe='')}"


def map_id(name: str, version: str) -> str:
    """Id of one version: words for people, and a digest that keeps apart what these do not."""
    digest = hashlib.sha256(repr((name, version)).encode()).hexdigest()[:8]
    words = _NOT_ID.sub("-", f"{name}-{version}")[:50].strip("-.")
    return f"{words}-{digest}"


def local_system(template: TemplateMap) -> str:
    """The code system of a form's fields and wordings: the clinic's, or one of the map's own."""
    return template.local_system or f"{TEMPLATE_MAP}/{quote(template.name, safe='')}"


class _Rows:
    """The rows in the making: target system -> source code -> its targets."""

    def __init__(self, template: TemplateMap, edition: Edition) -> None:
        self._template = template
        self._fifth = edition == "R5"
        self._found: dict[str, dict[str, list[Row]]] = {systems.FINDINGS: {}, systems.QUALIFIERS: {}}
        self._axes: dict[str, None] = {}
        self._catalogue = catalogue.load()

    def add(self, line: Line) -> None:
        """The rows of one line of the map."""
        beside = [(q.axis, q.constant) for q in line.qualifiers if q.constant]
        if line.named:
            self._put(systems.FINDINGS, line.field, self._row("", comment=_SEVERAL))
            self._wordings(line, line.field, line.named, beside)
        elif line.finding and line.field:
            part = line.number.part if line.number and line.number.split else 0
            self._put(systems.FINDINGS, line.field, self._row(line.finding, beside=beside, part=part))
            if line.choice:
                self._wordings(line, line.field, line.choice, [])
        for source in line.qualifiers:
            if source.field:
                self._qualifier(source)

    def groups(self) -> list[dict[str, Any]]:
        """ConceptMap.group."""
        made = []
        keeps = self._template.unknown_values == "keep-as-text"
        for target, elements in self._found.items():
            if not elements:
                continue
            group: dict[str, Any] = {"source": local_system(self._template), "target": target}
            group["element"] = [self._element(source, rows) for source, rows in elements.items()]
            if keeps and target == systems.QUALIFIERS:
                group["unmapped"] = (
                    {"mode": "use-source-code", "relationship": "related-to"}
                    if self._fifth
                    else {"mode": "provided"}
                )
            made.append(group)
        return made

    def attributes(self) -> list[dict[str, Any]]:
        """R5 ConceptMap.additionalAttribute: what rows depend on, or say beside."""
        field = {"code": FIELD_ATTRIBUTE, "uri": FIELD_PROPERTY, "type": "string"}
        axes = [{"code": axis, "uri": f"{systems.QUALIFIERS}#{axis}", "type": "code"} for axis in self._axes]
        return [field, *axes]

    def _element(self, source: str, rows: list[Row]) -> dict[str, Any]:
        if not self._fifth:
            return {"code": source, "target": rows}
        mapped = [row for row in rows if "code" in row]
        return {"code": source, "target": mapped} if mapped else {"code": source, "noMap": True}

    def _wordings(self, line: Line, field: str, choice: ChoiceList, beside: list[tuple[str, str]]) -> None:
        for wording, meaning in choice.meanings.items():
            more = [*beside, *meaning.qualifiers]
            if meaning.finding:
                self._put(systems.FINDINGS, wording, self._row(meaning.finding, field=field, beside=more))
            else:
                target = self._answer(line.finding, meaning)
                self._put(systems.QUALIFIERS, wording, self._row(target, field=field, beside=more))

    def _answer(self, finding: str, meaning: Meaning) -> str:
        if meaning.presence is None:
            return ""
        axis = self._catalogue.findings[finding].answers if finding else ""
        if meaning.answer and axis and meaning.presence is Presence.PRESENT:
            return f"{axis}:{meaning.answer}"
        return f"{_PRESENCE}:{meaning.presence.value}"

    def _qualifier(self, source: QualifierSource) -> None:
        self._put(systems.QUALIFIERS, source.field, self._row(source.axis))
        for wording, meaning in source.choice.meanings.items() if source.choice else ():
            target = f"{source.axis}:{meaning.answer}" if meaning.presence and meaning.answer else ""
            self._put(systems.QUALIFIERS, wording, self._row(target, field=source.field))

    def _put(self, system: str, source: str, row: Row) -> None:
        rows = self._found[system].setdefault(code(source), [])
        if row not in rows:
            rows.append(row)

    def _row(
        self,
        target: str,
        *,
        field: str = "",
        beside: list[tuple[str, str]] | None = None,
        comment: str = "",
        part: int = 0,
    ) -> Row:
        """One target; `part` is the number of the part of a box that holds several."""
        row: Row = {"code": target} if target else {}
        relation = _relation(target, bool(beside), bool(part))
        row["relationship" if self._fifth else "equivalence"] = relation[1 if self._fifth else 0]
        said = [comment] if comment else [] if target else [_NOTHING]
        said += [f"Number {part} of those in the box."] if part else []
        said += [_BESIDE] if beside else []
        if said:
            row["comment"] = " ".join(said)
        if field:
            depends = (
                {"attribute": FIELD_ATTRIBUTE, "valueString": field}
                if self._fifth
                else {"property": FIELD_PROPERTY, "value": field}
            )
            row["dependsOn"] = [depends]
        if beside:
            row["product"] = list(self._products(beside))
        return row

    def _products(self, beside: list[tuple[str, str]]) -> Iterator[Mapping[str, Any]]:
        for axis, value in beside:
            self._axes[axis] = None
            said = f"{axis}:{value}"
            if self._fifth:
                yield {"attribute": axis, "valueCode": said}
            else:
                property_ = f"{systems.QUALIFIERS}#{axis}"
                yield {"property": property_, "system": systems.QUALIFIERS, "value": said}


def _relation(target: str, says_more: bool, is_part: bool) -> tuple[str, str]:
    """R4 equivalence and R5 relationship of a source that says more than its target, or is part of a box."""
    if not target:
        return "unmatched", "not-related-to"
    if says_more and is_part:
        return "inexact", "related-to"
    if is_part:
        return "narrower", "source-is-broader-than-target"
    return ("wider", "source-is-narrower-than-target") if says_more else ("equivalent", "equivalent")
