"""Clause: how often an element stands: missing, too many, and one choice of `value[x]` only.

Source: FHIR ElementDefinition.min and max; "choice of data types" (R4, R4B, R5).
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from fhirgallop.conformance.editions import Edition
from fhirgallop.conformance.editions.model import Element
from fhirgallop.conformance.node import Node
from fhirgallop.outcome import Issue


def check(node: Node, edition: Edition) -> Iterator[Issue]:
    """Issues of the elements under one object node; the place of a missing element is its parent."""
    definition = edition.type(node.type_name)
    if definition is None:
        return
    counts: dict[str, int] = {}
    choices: dict[str, set[str]] = {}
    for key, item in node.value.items():
        place = definition.keys.get(key)
        if place is None:
            continue
        element = place.element
        counts[element.name] = max(counts.get(element.name, 0), _count(item, element))
        if element.is_choice:
            choices.setdefault(element.name, set()).add(key.removeprefix("_"))
    for element_name, element in definition.elements.items():
        count = counts.get(element_name, 0)
        if count < element.min:
            yield too_few(node, element)
        elif element.max is not None and count > element.max:
            yield too_many(node, element, element.max)
    for element_name, keys in choices.items():
        if len(keys) > 1:
            said = f"'{element_name}' stands {len(keys)} times with different types. Keep one."
            yield Issue("error", "structure", "choice-multiple", said, expression=node.expression)


def too_few(node: Node, element: Element) -> Issue:
    """The issue for an element that must be there."""
    said = f"'{element.stem}' is missing: {node.type_name} needs {_times(element.min)}. Add it."
    return Issue("error", "required", "cardinality-min", said, expression=node.expression)


def too_many(node: Node, element: Element, maximum: int) -> Issue:
    """The issue for an element that stands too often."""
    said = f"'{element.stem}' stands more often than the {maximum} allowed. Remove what is too many."
    return Issue("error", "structure", "cardinality-max", said, expression=node.expression)


def _times(least: int) -> str:
    return "it" if least == 1 else f"at least {least} of it"


def _count(item: Any, element: Element) -> int:
    """Occurrences under one key; a value of the wrong shape counts as one: its shape is judged elsewhere."""
    return max(len(item), 1) if element.many and isinstance(item, list) else 1
