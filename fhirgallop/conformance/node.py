"""Node: one element of the resource that is judged, with its place; Scope: what is known around it."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

from fhirgallop.conformance.editions.edition import Edition
from fhirgallop.conformance.editions.model import Child, Element

# names of elements that are words of FHIRPath itself
_ESCAPED = {"div": "`div`"}


class Node:
    """One element: its value, its type by the definitions, and its place.

    Attributes:
        value: JSON value (dict, str, bool, int, Decimal, float); None when a primitive has only `_x`.
        companion: the `_x` object of a primitive, or None.
        type_name: name for `Edition.type`.
        element: its definition; None at a root.
        parent: the node it stands in; None at a root.
        step: FHIRPath of this step ("component", "value.ofType(Quantity)", a root's type name).
        key: JSON key it stands under; "" at a root.
        index: place in its array; None when the element is no array.
        resource: the nearest resource (FHIRPath's %resource), the node itself if it is one.
        root_resource: the container if that resource is contained, else that resource (%rootResource).
    """

    __slots__ = (
        "companion",
        "element",
        "index",
        "key",
        "parent",
        "resource",
        "root_resource",
        "step",
        "type_name",
        "value",
    )

    def __init__(self, value: Any, type_name: str) -> None:
        """A root resource."""
        self.value = value
        self.companion: Any = None
        self.type_name = type_name
        self.element: Element | None = None
        self.parent: Node | None = None
        self.step = type_name
        self.key = ""
        self.index: int | None = None
        self.resource: Node = self
        self.root_resource: Node = self

    def child(self, value: Any, companion: Any, place: Child, key: str, index: int | None) -> Node:
        """The node under one key (and index) of this one; a resource when the definition says so."""
        node = Node.__new__(Node)
        node.value = value
        node.companion = companion
        node.element = place.element
        node.parent = self
        node.step = (
            f"{place.element.stem}.ofType({place.code})"
            if place.element.is_choice
            else _ESCAPED.get(place.element.name, place.element.name)
        )
        node.key = key
        node.index = index
        node.resource = self.resource
        node.root_resource = self.root_resource
        node.type_name = place.type_name
        return node

    def as_resource(self, type_name: str) -> None:
        """Says that this node is a resource of the type named: contained, in an entry or in parameters."""
        container = self.root_resource
        self.type_name = type_name
        self.resource = self
        self.root_resource = container if self.key == "contained" else self

    @property
    def expression(self) -> str:
        """FHIRPath that gives exactly this node, from the root."""
        steps = []
        node: Node | None = self
        while node is not None:
            steps.append(node.step if node.index is None else f"{node.step}[{node.index}]")
            node = node.parent
        return ".".join(reversed(steps))


def contained_ids(container: Node) -> frozenset[str]:
    """The ids of the resources contained in one; one that stands without its array counts."""
    contained = container.value.get("contained")
    contained = [contained] if isinstance(contained, Mapping) else contained
    found = (
        r.get("id") for r in (contained if isinstance(contained, list) else ()) if isinstance(r, Mapping)
    )
    return frozenset(ident for ident in found if isinstance(ident, str))


@dataclass(frozen=True, slots=True)
class Scope:
    """What a rule may ask beside its node.

    Attributes:
        edition: the definitions.
        root: the resource handed in.
        resolve: target of a reference written at a node, if it is contained or in the same Bundle.
        contained_ids: the ids of the resources contained in one.
        memo: what rules have worked out once and look up again while this resource is judged.
    """

    edition: Edition
    root: Node
    resolve: Callable[[Node, str], Node | None]
    contained_ids: Callable[[Node], frozenset[str]] = contained_ids
    memo: dict[Any, Any] = field(default_factory=dict, compare=False, repr=False)
