"""Reads the `lines` of a map, each checked by itself against the catalogue and the unit table."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

from fhirgallop import phrases
from fhirgallop.codes.units import UnitTable
from fhirgallop.exam.catalogue import Catalogue, FindingDefinition
from fhirgallop.mapping.document import Items, Node, Pairs, Scalar, clip
from fhirgallop.mapping.faults import Faults
from fhirgallop.mapping.meanings import GRADE, Meanings, choice_list
from fhirgallop.mapping.record_part import text, texts, time_source
from fhirgallop.mapping.template_map import (
    AllOf,
    AnyOf,
    BlankMeans,
    ChoiceList,
    Condition,
    FieldBlank,
    FieldIs,
    Line,
    Not,
    NumberForm,
    QualifierSource,
    WordsForm,
)

IN_VALUE: Final = "in-value"
_WAYS: Final = ("choice", "choices", "number", "text")
# How a box about a finding of each kind can be read; `choice` beside number and text holds words instead.
_WAYS_OF: Final[Mapping[str, tuple[frozenset[str], ...]]] = {
    "sign": (frozenset({"choice"}),),
    "choice": (
        frozenset({"choice"}),
        frozenset({"choices"}),
        frozenset({"text"}),
        frozenset({"choice", "text"}),
    ),
    "quantity": (frozenset({"number"}), frozenset({"number", "choice"})),
    "text": (frozenset({"text"}), frozenset({"text", "choice"})),
}
_ADVICE: Final = {
    "sign": "write choice: with every wording of the box and the presence it means",
    "choice": "write choice: with every wording of the box and the answer it means",
    "quantity": "write number: with the unit (and, besides, choice: for words such as 'not done')",
    "text": "write text: true",
}


@dataclass(frozen=True, slots=True)
class Section:
    """What the lines of a section share."""

    blank_means: BlankMeans | None
    when: Condition | None


class LineReader:
    """Reads lines; `sections` and `blank_means` are what stands above them in the map."""

    def __init__(
        self,
        catalogue: Catalogue,
        units: UnitTable,
        faults: Faults,
        *,
        sections: Mapping[str, Section],
        blank_means: BlankMeans,
    ) -> None:
        self._catalogue = catalogue
        self._units = units
        self._faults = faults
        self._meanings = Meanings(catalogue, faults)
        self._sections = sections
        self._blank_means = blank_means

    def line(self, node: Pairs) -> Line | None:
        """One line, or None where too much of it is wrong."""
        if node.get("findings"):
            return self._naming(node)
        if node.get("words"):
            return self._in_words(node)
        if node.get("finding"):
            return self._about_finding(node)
        return self._remark(node) if node.get("note") else None

    def _remark(self, node: Pairs) -> Line:
        self._only(node, "a remark of the whole examination", {"note", "when", "section"})
        return Line(node.line, note=text(node, "note"), section=self._section(node), when=self._when(node))

    def _in_words(self, node: Pairs) -> Line | None:
        self._only(node, "a box that holds a line of text", {"field", "words", "section", "when"})
        group, field = node.get("words"), text(node, "field")
        if not isinstance(group, Pairs) or node.refused:
            return None
        if not field:
            self._missing(node, "field", "a line of text needs the field that holds it")
        language = text(group, "language")
        if language not in phrases.languages():
            known = ", ".join(phrases.languages())
            self._faults.add(
                group.line,
                "map-unknown-language",
                f"There are no wordings in this language; write one of {known}.",
            )
        form = WordsForm(language, text(group, "status") == "preliminary")
        return Line(node.line, section=self._section(node), field=field, when=self._when(node), words=form)

    def _naming(self, node: Pairs) -> Line | None:
        self._only(
            node,
            "a box that names several findings",
            {"field", "findings", "section", "instance", "when", "note", "time", "blank-means"},
        )
        group = node.get("findings")
        if not isinstance(group, Pairs):
            return None
        if not text(node, "field") and not node.refused:
            self._missing(node, "field", "a box that names several findings needs the field that holds it")
        named = choice_list(group, self._meanings.of_names(group.get("values")), several=True)
        return Line(
            node.line,
            instance=text(node, "instance"),
            section=self._section(node),
            field=text(node, "field"),
            named=named,
            unlisted=text(group, "unlisted", "not-recorded"),  # type: ignore[arg-type]
            note=text(node, "note"),
            when=self._when(node),
            blank_means=self._blank(node, None),
            time=time_source(node.get("time"), self._faults),
        )

    def _about_finding(self, node: Pairs) -> Line | None:
        name = node.get("finding")
        definition = self._meanings.finding(name) if isinstance(name, Scalar) else None
        when, section = self._when(node), self._section(node)
        if definition is None:
            return None
        if definition.kind == "panel":
            parts = ", ".join(part.id for part in self._catalogue.parts.get(definition.id, ()))
            words = f"{definition.id} only gathers its parts; write a line for each of them: {parts}."
            self._faults.add(node.line, "map-kind", words)
            return None
        self._check_ways(node, definition)
        choice, number = self._choice(node, definition), self._number(node.get("number"), definition)
        constant = node.get("presence")
        presence = self._meanings.presence(constant, definition) if isinstance(constant, Scalar) else None
        return Line(
            node.line,
            definition.id,
            text(node, "instance"),
            section,
            text(node, "field"),
            presence,
            choice,
            number,
            text(node, "text") == "true",
            None,
            "not-recorded",
            self._qualifiers(node.get("qualifiers"), definition),
            text(node, "note"),
            when,
            self._blank(node, definition),
            time_source(node.get("time"), self._faults),
        )

    def _check_ways(self, node: Pairs, definition: FindingDefinition) -> None:
        ways = frozenset(way for way in _WAYS if node.get(way))
        field, presence = node.get("field"), node.get("presence")
        if node.refused:
            return
        advice = f"{definition.id} is a {definition.kind}: {_ADVICE[definition.kind]}."
        if field and presence:
            words = "A line has a field and a constant presence; keep the field with choice, or the constant."
            self._faults.add(node.line, "map-contradictory-keys", words)
        elif presence and ways:
            words = f"A constant presence reads no box; remove {', '.join(sorted(ways))}."
            self._faults.add(node.line, "map-contradictory-keys", words)
        elif not field and not presence:
            self._missing(
                node,
                "field",
                f"the line about {definition.id} names no box; a sign may have a constant presence instead",
            )
        elif field and ways not in _WAYS_OF[definition.kind]:
            self._faults.add(node.line, "map-kind", f"The box cannot be read in this way. {advice}")

    def _choice(self, node: Pairs, definition: FindingDefinition) -> ChoiceList | None:
        if table := node.get("choice"):
            return choice_list(table, self._meanings.of_finding(table, definition), several=False)
        group = node.get("choices")
        if not isinstance(group, Pairs):
            return None
        return choice_list(group, self._meanings.of_finding(group.get("values"), definition), several=True)

    def _number(self, node: Node | None, definition: FindingDefinition) -> NumberForm | None:
        if not isinstance(node, Pairs):
            return None
        split, part = text(node, "split"), text(node, "part")
        if bool(split) != bool(part) and not node.refused:
            self._missing(
                node,
                "part" if split else "split",
                "split and part belong together: split: '/' and part: 1 read the first number of 152/84",
            )
        return NumberForm(
            self._unit(node, definition), split, int(part or 1), text(node, "decimal", "."), node.line
        )

    def _unit(self, node: Pairs, definition: FindingDefinition) -> str:
        written = node.get("unit")
        if not isinstance(written, Scalar) or written.text == IN_VALUE or definition.kind != "quantity":
            return ""
        target = self._units.by_code[definition.unit]
        unit = self._units.find(written.text)
        if unit is None:
            known = [u.code for u in self._units.by_code.values() if u.dimension == target.dimension]
            words = (
                f"The unit {clip(written.text)} is not known; {definition.id} can be in {', '.join(known)}, "
                f"or write {IN_VALUE} where each value brings its own."
            )
            self._faults.add(
                written.line, "map-unknown-unit", words, code="code-invalid", column=written.column
            )
            return ""
        if unit.dimension != target.dimension:
            known = [u.code for u in self._units.by_code.values() if u.dimension == target.dimension]
            words = (
                f"The unit {unit.code} cannot measure {definition.id}, which can be in {', '.join(known)}."
            )
            self._faults.add(written.line, "map-unit-dimension", words, code="value", column=written.column)
        return unit.code

    def _qualifiers(self, table: Node | None, definition: FindingDefinition) -> tuple[QualifierSource, ...]:
        if not isinstance(table, Pairs):
            return ()
        return tuple(
            source
            for axis, group in table.items
            if self._meanings.axis_fits(axis, definition) and isinstance(group, Pairs)
            if (source := self._qualifier(axis.text, group))
        )

    def _qualifier(self, axis: str, node: Pairs) -> QualifierSource | None:
        ways = [way for way in ("constant", "choice", "choices", "grade", "text") if node.get(way)]
        field, constant, grade = text(node, "field"), node.get("constant"), node.get("grade")
        if node.refused:
            return None
        if len(ways) != 1 or bool(field) == bool(constant):
            words = (
                f"The qualifier {axis} needs either a constant, or a field with one of "
                "choice, choices, grade, text."
            )
            self._faults.add(node.line, "map-contradictory-keys", words)
            return None
        if (axis == GRADE) != bool(grade) and ways[0] in ("choice", "choices", "grade"):
            words = (
                "grade: is for the qualifier grade, which is read by nothing else but text: or a constant."
            )
            self._faults.add(node.line, "map-kind", words)
            return None
        if isinstance(constant, Scalar):
            return (
                QualifierSource(axis, constant=constant.text, line=node.line)
                if self._meanings.value_fits(constant, axis)
                else None
            )
        if isinstance(grade, Pairs):
            return QualifierSource(axis, field, grade_of=int(text(grade, "of", "6")), line=node.line)
        if ways[0] == "text":
            return QualifierSource(axis, field, text=True, line=node.line)
        table = node.get(ways[0])
        several = ways[0] == "choices"
        values = table.get("values") if several and isinstance(table, Pairs) else table
        choice = choice_list(table, self._meanings.of_axis(values, axis), several=several)
        return QualifierSource(axis, field, choice=choice, line=node.line)

    def _section(self, node: Pairs) -> str:
        section = node.get("section")
        if isinstance(section, Scalar) and section.text not in self._sections:
            words = (
                f"The section {clip(section.text)} is not declared; add it below "
                f"sections.{self._faults.near(section.text, self._sections)}"
            )
            self._faults.add(
                section.line, "map-unknown-section", words, code="not-found", column=section.column
            )
        return section.text if isinstance(section, Scalar) else ""

    def _blank(self, node: Pairs, definition: FindingDefinition | None) -> BlankMeans:
        own = node.get("blank-means")
        section = self._sections.get(text(node, "section"))
        means = text(node, "blank-means") or (section.blank_means if section else None) or self._blank_means
        if means == "absent" and definition and definition.kind != "sign":
            if isinstance(own, Scalar):
                words = (
                    f"{definition.id} is a {definition.kind}, which cannot be absent; write "
                    "not-recorded or not-examined."
                )
                self._faults.add(own.line, "map-kind", words, column=own.column)
            return "not-recorded"
        return means  # type: ignore[return-value]

    def _when(self, node: Pairs) -> Condition | None:
        own = node.get("when")
        section = self._sections.get(text(node, "section"))
        parts = [section.when if section else None, condition(own, self._faults) if own else None]
        both = tuple(part for part in parts if part)
        return AllOf(both) if len(both) > 1 else both[0] if both else None

    def _only(self, node: Pairs, what: str, allowed: set[str]) -> None:
        for key, _ in node.items:
            if key.text not in allowed:
                words = f"{key.text} has no meaning on {what}; remove it, or write a line of its own."
                self._faults.add(key.line, "map-contradictory-keys", words, column=key.column)

    def _missing(self, node: Pairs, key: str, why: str) -> None:
        self._faults.add(node.line, "map-missing-key", f"The key {key} is missing: {why}.", code="required")


def condition(node: Node | None, faults: Faults) -> Condition | None:
    """A condition of a group that conforms to the grammar; None where it is faulty."""
    if not isinstance(node, Pairs):
        return None
    ways = [key.text for key, _ in node.items if key.text in ("field", "all", "any", "not")]
    if node.refused and not ways:
        return None
    if len(ways) != 1:
        words = (
            "A condition is one of: a field with is or blank; all; any; not. Put several below all or any."
        )
        faults.add(node.line, "map-contradictory-keys", words)
        return None
    if ways[0] == "field":
        return _field_condition(node, faults)
    inner = node.get(ways[0])
    if ways[0] == "not":
        part = condition(inner, faults)
        return Not(part) if part else None
    items = inner.items if isinstance(inner, Items) else ()
    parts = tuple(part for item in items if (part := condition(item, faults)))
    return AllOf(parts) if ways[0] == "all" else AnyOf(parts)


def _field_condition(node: Pairs, faults: Faults) -> Condition | None:
    words, blank = texts(node.get("is")), text(node, "blank")
    if node.refused:
        return None
    if bool(words) == bool(blank):
        faults.add(
            node.line,
            "map-missing-key",
            "A condition on a field needs either is: [wording] or blank: true.",
            code="required",
        )
        return None
    name = text(node, "field")
    return FieldIs(name, words) if words else FieldBlank(name, blank == "true")
