"""Clause: contained resources beside what the invariants dom-2 to dom-5 and ref-1 say of them.

Source: FHIR "Contained resources" (R4, R4B, R5).
"""

from __future__ import annotations

from collections.abc import Iterator

from fhirgallop.conformance.node import Node
from fhirgallop.outcome import Issue


def check(node: Node) -> Iterator[Issue]:
    """Issues of the contained resources of one resource: their ids tell them apart."""
    contained = node.value.get("contained")
    if not isinstance(contained, list):
        return
    seen: set[str] = set()
    for index, resource in enumerate(contained):
        ident = resource.get("id") if isinstance(resource, dict) else None
        if not isinstance(ident, str):
            continue
        if ident in seen:
            said = "Another contained resource has this id already. Give each its own."
            at = f"{node.expression}.contained[{index}]"
            yield Issue("error", "duplicate", "contained-id", said, expression=at)
        seen.add(ident)
