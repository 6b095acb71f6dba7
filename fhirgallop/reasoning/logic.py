"""Three-valued logic: true, false and unknown (strong Kleene logic, S. C. Kleene 1952).

What nobody recorded is unknown; unknown never becomes true by being combined.
"""

from __future__ import annotations

from collections.abc import Iterable
from enum import Enum


class Truth(Enum):
    """The three values."""

    TRUE = "true"
    FALSE = "false"
    UNKNOWN = "unknown"

    def __invert__(self) -> Truth:
        if self is Truth.UNKNOWN:
            return self
        return Truth.FALSE if self is Truth.TRUE else Truth.TRUE


def all_of(values: Iterable[Truth]) -> Truth:
    """True when all are; false as soon as one is false."""
    found = Truth.TRUE
    for value in values:
        if value is Truth.FALSE:
            return Truth.FALSE
        if value is Truth.UNKNOWN:
            found = Truth.UNKNOWN
    return found


def any_of(values: Iterable[Truth]) -> Truth:
    """True as soon as one is; false when all are false."""
    found = Truth.FALSE
    for value in values:
        if value is Truth.TRUE:
            return Truth.TRUE
        if value is Truth.UNKNOWN:
            found = Truth.UNKNOWN
    return found
