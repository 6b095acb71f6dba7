"""Words of field names, from terminology/field-words.csv: idle ones, short forms, units, sides."""

from __future__ import annotations

import csv
from collections.abc import Mapping
from typing import Final

from fhirgallop import assets


def _read() -> Mapping[str, tuple[tuple[str, str], ...]]:
    found: dict[str, list[tuple[str, str]]] = {}
    with assets.path("terminology", "field-words.csv").open(encoding="utf-8", newline="") as file:
        for row in csv.DictReader(file):
            found.setdefault(row["kind"], []).append((row["word"], row["means"]))
    return {kind: tuple(pairs) for kind, pairs in found.items()}


def _grouped(pairs: tuple[tuple[str, str], ...]) -> Mapping[str, tuple[str, ...]]:
    owners = dict.fromkeys(means for _, means in pairs)
    return {owner: tuple(word for word, means in pairs if means == owner) for owner in owners}


_ALL: Final = _read()

IDLE: Final = frozenset(word for word, _ in _ALL["idle"])
"""Words of forms that say nothing of what a field means."""
SIDES: Final = dict(_ALL["side"])
UNITS: Final = dict(_ALL["unit"])
SHORT: Final = dict(_ALL["short"])
"""Short forms inside longer names, and what they stand for; common practice, no source."""
PLAIN: Final = frozenset(word for word, _ in _ALL["plain"])
"""Words that follow capitals without a gap: PAmean."""
RECORD_WORDINGS: Final = _grouped(_ALL["record"])
MURMUR_AXES: Final = tuple(word for word, _ in _ALL["murmur-axis"])
"""Properties of a murmur that forms ask for in boxes of their own."""
MURMUR_WORDINGS: Final = _grouped(_ALL["murmur"])
