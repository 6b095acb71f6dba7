"""What the text of a map does with each field, also while the map still has faults."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any, Final, Literal

from fhirgallop.errors import MapError
from fhirgallop.exam import catalogue
from fhirgallop.mapping.editing import entries, part
from fhirgallop.mapping.template_map import Ignored

Kind = Literal["finding", "qualifier", "remark", "condition", "time", "record", "ignored"]
_PARTS: Final = ("patient", "identifier", "time", "encounter", "examiner", "status")


@dataclass(frozen=True, slots=True)
class Use:
    """One use of a field.

    Attributes:
        kind: what it is used for.
        says: in words: the finding, the property, the part of the record, or why it is left out.
        at: place among the lines (or among what is ignored), from 0; None for a part of the record.
        first, end: its lines in the text, counted from 0, `end` not included.
        value: the entry itself.
    """

    kind: Kind
    says: str
    at: int | None = None
    first: int = 0
    end: int = 0
    value: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Uses:
    """Uses by field; `patterns` are what is ignored by a pattern; `broken` when the text cannot be read."""

    by_field: Mapping[str, list[Use]]
    patterns: tuple[tuple[Ignored, Use], ...]
    broken: bool = False

    def of(self, name: str) -> list[Use]:
        """Everything the map does with a field."""
        found = self.by_field.get(name, [])
        return [*found, *(use for pattern, use in self.patterns if pattern.covers(name))]

    def state(self, name: str) -> str:
        """mapped, ignored or open."""
        found = {use.kind for use in self.of(name)}
        return "mapped" if found - {"ignored"} else "ignored" if found else "open"


def uses(text: str) -> Uses:
    """What a map's text does with fields."""
    by_field: dict[str, list[Use]] = {}
    patterns = []
    try:
        lines, ignored, record = entries(text), entries(text, "ignore"), part(text, "record")
    except MapError:
        return Uses({}, (), broken=True)
    for name, said in _of_record(record):
        by_field.setdefault(name, []).append(Use("record", said))
    for at, block in enumerate(lines):
        for name, kind, says in dict.fromkeys(_of_line(block.value)):
            by_field.setdefault(name, []).append(Use(kind, says, at, block.first, block.end, block.value))
    for at, block in enumerate(ignored):
        reason = str(block.value.get("reason") or "")
        use = Use("ignored", reason, at, block.first, block.end, block.value)
        if block.value.get("field"):
            by_field.setdefault(str(block.value["field"]), []).append(use)
        elif block.value.get("fields"):
            pattern = str(block.value["fields"])
            patterns.append((Ignored(pattern, reason), use))
    return Uses(by_field, tuple(patterns))


def label(finding: str) -> str:
    """The clinical words of a finding id; the id where the catalogue has none."""
    known = catalogue.load().findings.get(finding)
    return known.label if known else finding


def axis_label(axis: str) -> str:
    """The words of a property."""
    known = catalogue.load().axes.get(axis)
    return known.label if known else axis


def _of_record(record: Any) -> Iterator[tuple[str, str]]:
    for name in _PARTS:
        held = record.get(name) if isinstance(record, Mapping) else None
        for field_ in _fields(held):
            yield field_, name


def _fields(held: Any) -> Iterator[str]:
    if not isinstance(held, Mapping):
        return
    if isinstance(held.get("field"), str):
        yield held["field"]
    several = held.get("fields")
    for one in several if isinstance(several, list) else ():
        if isinstance(one, str):
            yield one


def _of_line(value: Mapping[str, Any]) -> Iterator[tuple[str, Kind, str]]:
    said = label(str(value["finding"])) if value.get("finding") else "several findings"
    if isinstance(value.get("field"), str):
        yield value["field"], "finding", said
    qualifiers = value.get("qualifiers")
    for axis, source in qualifiers.items() if isinstance(qualifiers, Mapping) else ():
        for name in _fields(source):
            yield name, "qualifier", f"{said}: {axis_label(str(axis)).lower()}"
    if isinstance(value.get("note"), str):
        yield value["note"], "remark", f"{said}: remark" if value.get("finding") else "remark"
    for name in _fields(value.get("time")):
        yield name, "time", f"{said}: its time"
    for name in _conditions(value.get("when")):
        yield name, "condition", f"{said}: whether it is read"


def _conditions(when: Any) -> Iterator[str]:
    waiting = [when]
    while waiting:
        one = waiting.pop()
        if isinstance(one, list):
            waiting += one
        elif isinstance(one, Mapping):
            if isinstance(one.get("field"), str):
                yield one["field"]
            waiting += [one.get("all"), one.get("any"), one.get("not")]
