"""Comparison of JSON values as profiles ask for it: the same (fixed), or holding at least (pattern).

Source: FHIR ElementDefinition.fixed[x] and pattern[x] (R4, R4B, R5).
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any


def equal(value: Any, wanted: Any) -> bool:
    """Whether the value is exactly the fixed one; a number equals a number of the same amount."""
    if isinstance(wanted, Mapping):
        return (
            isinstance(value, Mapping)
            and value.keys() == wanted.keys()
            and all(equal(value[k], w) for k, w in wanted.items())
        )
    if isinstance(wanted, list):
        return (
            isinstance(value, list)
            and len(value) == len(wanted)
            and all(equal(v, w) for v, w in zip(value, wanted, strict=True))
        )
    return isinstance(value, bool) == isinstance(wanted, bool) and bool(value == wanted)


def contains(value: Any, wanted: Any) -> bool:
    """Whether the value holds all that the pattern says; each item of a list must be found in any place."""
    if isinstance(wanted, Mapping):
        return isinstance(value, Mapping) and all(
            k in value and contains(value[k], w) for k, w in wanted.items()
        )
    if isinstance(wanted, list):
        return isinstance(value, list) and all(any(contains(v, w) for v in value) for w in wanted)
    return equal(value, wanted)
