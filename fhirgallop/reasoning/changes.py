"""What changed since the last examination: only what both examinations looked at."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

from fhirgallop.exam.context import Source, State
from fhirgallop.reasoning.conclusion import item_dict
from fhirgallop.reasoning.items import Item, ItemTable

ChangeKind = Literal["appeared", "gone", "different"]


@dataclass(frozen=True, slots=True)
class Change:
    """A finding that is not as it was."""

    kind: ChangeKind
    before: Item
    now: Item

    def as_dict(self) -> dict[str, Any]:
        """JSON values."""
        return {"kind": self.kind, "before": item_dict(self.before), "now": item_dict(self.now)}


def changes(table: ItemTable) -> tuple[Change, ...]:
    """Every change against the latest earlier examination that looked for the same finding, by id."""
    found = []
    for id_ in sorted(table.by_id):
        items = [
            item
            for item in table.by_id[id_]
            if item.id == id_ and item.state in (State.PRESENT, State.ABSENT)
        ]
        now = [item for item in items if item.of_exam]
        before = [item for item in items if item.source is Source.EARLIER_EXAM and item.age is not None]
        if len(now) == 1 and before:
            latest = min(before, key=_age)
            if sum(_age(item) == _age(latest) for item in before) == 1:
                kind = _kind(latest, now[0])
                if kind is not None:
                    found.append(Change(kind, latest, now[0]))
    return tuple(found)


def _age(item: Item) -> int:
    return item.age if item.age is not None else 0


def _kind(before: Item, now: Item) -> ChangeKind | None:
    if before.state is not now.state:
        return "appeared" if now.state is State.PRESENT else "gone"
    if now.measure is None and set(before.answers) != set(now.answers):
        return "different"
    return None
