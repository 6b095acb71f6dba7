"""Frame: what a compiled expression can see while it runs, and the bounds it runs in."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from fhirgallop.conformance.fhirpath.items import CannotJudge, Collection, Item
from fhirgallop.conformance.fhirpath.model import Model, model_of
from fhirgallop.conformance.node import Node, Scope

# Steps that one expression may take over all nodes of one validation, so that the time stays bounded:
# so many in any case, and so many passes over the longest collection it meets.
MAX_STEPS = 500_000
MAX_PASSES = 20


class Run:
    """One evaluation of one expression at one node.

    Attributes:
        node: the node the expression stands at (%context).
        scope: what is known around it.
        model: the fields of the edition's types.
        incomplete: set when a required element, or a primitive's value, was missing on the way.
        kept: results of parts that are the same for every item of this run.
    """

    __slots__ = ("context", "incomplete", "kept", "longest", "model", "node", "scope", "steps")

    def __init__(self, node: Node, scope: Scope, steps: int = 0) -> None:
        self.node = node
        self.scope = scope
        self.model: Model = model_of(scope.edition)
        self.context: Collection = [Item.of(node)]
        self.incomplete = False
        self.kept: dict[Any, Any] = {}
        self.steps = steps
        self.longest = 0

    def spend(self, items: int) -> None:
        """Counts one pass over so many items.

        Raises:
            CannotJudge: the bound is reached.
        """
        self.steps += items
        self.longest = max(self.longest, items)
        if self.steps > MAX_STEPS + MAX_PASSES * self.longest:
            raise CannotJudge("the rule would take too long on so large a resource")


class Frame:
    """`$this`, `$index` and `$total` of the innermost function around."""

    __slots__ = ("index", "run", "this", "total")

    def __init__(
        self, run: Run, this: Collection, index: int | None = None, total: Collection | None = None
    ) -> None:
        self.run = run
        self.this = this
        self.index = index
        self.total = total


Code = Callable[[Collection, Frame], Collection]
"""A compiled expression: focus and frame -> collection. It never changes a collection it was given."""


def argument(code: Code, frame: Frame) -> Collection:
    """The value of an argument that belongs to the surroundings, not to each item."""
    return code(frame.this, frame)
