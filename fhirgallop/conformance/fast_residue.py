"""What a schema cannot say of an accepted resource, looked at in plain Python: numbers, order, equality.

Each check is for a value at a resource's root, and true only if the walk would find nothing there.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

Check = Callable[[Any], bool]

# types of a choice that are often met; beside those looked at apart, plain forms take no others
OFTEN = ("Quantity", "CodeableConcept", "string", "boolean", "dateTime")
_DAY = len("2026-03-04")


def is_whole(value: Any) -> bool:
    """An integer as FHIR writes it: JSON Schema takes 1.0 as well."""
    return type(value) is int


def in_order(value: Any) -> bool:
    """A Range whose ends have one unit and are in order (rng-2)."""
    low, high = value.get("low"), value.get("high")
    if low is None or high is None:
        return True
    same = all(low.get(key) == high.get(key) for key in ("unit", "system", "code"))
    return bool(same and "value" in low and "value" in high and low["value"] <= high["value"])


def one_after_the_other(value: Any) -> bool:
    """A Period whose ends are written alike and are in order (per-1)."""
    start, end = value.get("start"), value.get("end")
    if start is None or end is None:
        return True
    # of one length and in one zone, texts of moments are ordered as the moments are
    return bool(
        len(start) == len(end) and start <= end and (len(start) <= _DAY or _zone(start) == _zone(end))
    )


def _zone(moment: str) -> str:
    return "Z" if moment.endswith("Z") else moment[-6:]


def codes_apart(observation: Mapping[str, Any]) -> bool:
    """No component has a code of the Observation itself, which has a value (obs-7)."""
    own = [coding["code"] for coding in observation["code"].get("coding", ()) if "code" in coding]
    for component in observation["component"]:
        for coding in component["code"].get("coding", ()):
            if "code" not in coding or coding["code"] in own:
                return False
    return True


def components_apart(observation: Mapping[str, Any]) -> bool:
    """The same of an Observation that has components and, if any, a value of an ordinary type."""
    return observation.keys().isdisjoint(_VALUES) or codes_apart(observation)


# type of a root element -> its check, and the invariants which that check answers for
CHECKS: Mapping[str, tuple[Check, frozenset[str]]] = {
    "integer": (is_whole, frozenset()),
    "positiveInt": (is_whole, frozenset()),
    "unsignedInt": (is_whole, frozenset()),
    "Range": (in_order, frozenset({"rng-2"})),
    "Period": (one_after_the_other, frozenset({"per-1"})),
}
_VALUES = tuple(f"value{name[:1].upper()}{name[1:]}" for name in (*OFTEN, *CHECKS))
