"""Reads what a wording means: presence, answer, qualifiers; checked against the catalogue."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Final

from fhirgallop.exam.catalogue import AxisValue, Catalogue, FindingDefinition
from fhirgallop.exam.presence import Presence
from fhirgallop.mapping import grades
from fhirgallop.mapping.document import Node, Pairs, Scalar, clip
from fhirgallop.mapping.faults import Faults
from fhirgallop.mapping.record_part import text
from fhirgallop.mapping.template_map import ChoiceList, Meaning

NOT_RECORDED: Final = "not-recorded"
GRADE: Final = "grade"
_PRESENCES: Final = tuple(presence.value for presence in Presence)
# A number, a text or a chosen answer is there or it is missing; only the reason can be said in words.
_WHY_MISSING: Final = ("not-examined", "not-examinable")


class Meanings:
    """Reads meanings for one catalogue; what does not fit goes into `faults`."""

    def __init__(self, catalogue: Catalogue, faults: Faults) -> None:
        self._catalogue = catalogue
        self._faults = faults

    def presence(self, node: Scalar, definition: FindingDefinition) -> Presence | None:
        """A presence that this finding can have."""
        known = _PRESENCES if definition.kind == "sign" else _WHY_MISSING
        if node.text in known:
            return Presence(node.text)
        words = (
            f"{clip(node.text)} cannot be said of {definition.id}, which is a {definition.kind}; "
            f"there are: {', '.join(known)}.{self._faults.near(node.text, known)}"
        )
        self._faults.add(node.line, "map-unknown-presence", words, code="code-invalid", column=node.column)
        return None

    def of_finding(self, table: Node | None, definition: FindingDefinition) -> dict[str, Meaning]:
        """Wording -> meaning, for a box about one finding."""
        return {
            key.text: meaning
            for key, value in _pairs(table)
            if (meaning := self._of_finding(value, definition))
        }

    def _of_finding(self, node: Node, definition: FindingDefinition) -> Meaning | None:
        if isinstance(node, Scalar):
            if node.text == NOT_RECORDED:
                return Meaning(None, line=node.line)
            answers = self._catalogue.answers(definition)
            # An answer of the finding's own list comes first: a pulse amplitude can itself be `absent`.
            if node.text in answers:
                return Meaning(Presence.PRESENT, node.text, line=node.line)
            if answers and node.text not in _WHY_MISSING:
                self._unknown_value(node, definition.answers, answers, f"an answer of {definition.id}")
                return None
            presence = self.presence(node, definition)
            return Meaning(presence, line=node.line) if presence else None
        return self._long(node, definition) if isinstance(node, Pairs) else None

    def _long(self, node: Pairs, definition: FindingDefinition) -> Meaning | None:
        answer, presence = node.get("answer"), node.get("presence")
        if answer and presence:
            words = "A meaning has answer and presence; an answer is always present: keep one of the two."
            self._faults.add(node.line, "map-contradictory-keys", words)
        said: Presence | None = Presence.PRESENT
        if isinstance(answer, Scalar):
            answers = self._catalogue.answers(definition)
            if not answers:
                words = f"{definition.id} has no list of answers; write presence instead."
                self._faults.add(answer.line, "map-kind", words)
            elif answer.text not in answers:
                self._unknown_value(answer, definition.answers, answers, f"an answer of {definition.id}")
                return None
        elif isinstance(presence, Scalar) and presence.text == NOT_RECORDED:
            said = None
        elif isinstance(presence, Scalar):
            said = self.presence(presence, definition)
            if said is None:
                return None
        else:
            return None
        qualifiers = self.qualifiers(node.get("qualifiers"), definition)
        return Meaning(said, text(node, "answer"), qualifiers, text(node, "reason"), line=node.line)

    def qualifiers(self, table: Node | None, definition: FindingDefinition) -> tuple[tuple[str, str], ...]:
        """Constant qualifiers, as (axis, value id)."""
        found = []
        for key, value in _pairs(table):
            if (
                self.axis_fits(key, definition)
                and isinstance(value, Scalar)
                and self.value_fits(value, key.text)
            ):
                found.append((key.text, value.text))
        return tuple(found)

    def axis_fits(self, key: Scalar, definition: FindingDefinition) -> bool:
        """True when the axis may qualify the finding; else a fault."""
        if key.text in definition.qualifiers:
            return True
        known = sorted(definition.qualifiers)
        listing = f"there are: {', '.join(known)}" if known else "it has no qualifiers"
        words = (
            f"{clip(key.text)} does not qualify {definition.id}; "
            f"{listing}.{self._faults.near(key.text, known)}"
        )
        self._faults.add(key.line, "map-unknown-qualifier", words, code="code-invalid", column=key.column)
        return False

    def value_fits(self, node: Scalar, axis: str) -> bool:
        """True when the axis has this value (or, for a grade, when it can be read); else a fault."""
        if axis == GRADE:
            grade = grades.read(node.text, 0)
            if isinstance(grade, str):
                words = f"A constant grade names its scale, as 3/6 does: {grade}."
                self._faults.add(node.line, "map-form", words, code="value", column=node.column)
            return not isinstance(grade, str)
        values = self._catalogue.axes[axis].values
        if node.text not in values:
            self._unknown_value(node, axis, values, f"a value of {axis}")
        return node.text in values

    def of_axis(self, table: Node | None, axis: str) -> dict[str, Meaning]:
        """Wording -> meaning, for a box that holds a qualifier."""
        found = {}
        for key, value in _pairs(table):
            if not isinstance(value, Scalar):
                words = (
                    f"The wording {clip(key.text)} of a qualifier means a single value of "
                    f"{axis}, or not-recorded."
                )
                self._faults.add(value.line, "map-wrong-kind", words)
            elif value.text == NOT_RECORDED and value.text not in self._catalogue.axes[axis].values:
                found[key.text] = Meaning(None, line=value.line)
            elif self.value_fits(value, axis):
                found[key.text] = Meaning(Presence.PRESENT, value.text, line=value.line)
        return found

    def of_names(self, table: Node | None) -> dict[str, Meaning]:
        """Wording -> meaning, for a box that names several findings."""
        found = {}
        for key, value in _pairs(table):
            if isinstance(value, Scalar) and value.text == NOT_RECORDED:
                found[key.text] = Meaning(None, line=value.line)
                continue
            name = (
                value
                if isinstance(value, Scalar)
                else value.get("finding")
                if isinstance(value, Pairs)
                else None
            )
            definition = self.finding(name) if isinstance(name, Scalar) else None
            if definition is None:
                continue
            if definition.kind != "sign":
                words = (
                    f"{definition.id} is a {definition.kind}; a box of names can only hold "
                    "signs. Give it a line of its own."
                )
                self._faults.add(value.line, "map-kind", words)
                continue
            found[key.text] = self._named(value, definition)
        return found

    def _named(self, value: Node, definition: FindingDefinition) -> Meaning:
        presence: Presence | None = Presence.PRESENT
        qualifiers: tuple[tuple[str, str], ...] = ()
        if isinstance(value, Pairs):
            said = value.get("presence")
            if isinstance(said, Scalar):
                presence = self.presence(said, definition)
            qualifiers = self.qualifiers(value.get("qualifiers"), definition)
        return Meaning(presence, "", qualifiers, "", definition.id, value.line)

    def finding(self, node: Scalar) -> FindingDefinition | None:
        """The catalogue's finding of that id; else a fault."""
        definition = self._catalogue.findings.get(node.text)
        if definition is None:
            words = (
                f"{clip(node.text)} is not a finding of the catalogue (terminology/findings.csv lists them)."
                f"{self._faults.near_finding(node.text, self._catalogue)}"
            )
            self._faults.add(node.line, "map-unknown-finding", words, code="code-invalid", column=node.column)
        return definition

    def _unknown_value(self, node: Scalar, axis: str, values: Mapping[str, AxisValue], what: str) -> None:
        known = list(values)
        shown = ", ".join(known[:12]) + (
            f" and {len(known) - 12} more under {axis}" if len(known) > 12 else ""
        )
        words = f"{clip(node.text)} is not {what}; there are: {shown}.{self._faults.near(node.text, known)}"
        self._faults.add(node.line, "map-unknown-value", words, code="code-invalid", column=node.column)


def choice_list(node: Node | None, meanings: dict[str, Meaning], *, several: bool) -> ChoiceList | None:
    """A ChoiceList of meanings already read from `node` (its table, or the group around the table)."""
    if not isinstance(node, Pairs):
        return None
    return ChoiceList(meanings, several, text(node, "separator") if several else "", node.line)


def _pairs(node: Node | None) -> tuple[tuple[Scalar, Node], ...]:
    return node.items if isinstance(node, Pairs) else ()
