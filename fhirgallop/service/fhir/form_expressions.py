"""FHIRPath over the answers of a form, within one bound of time for all expressions together."""

from __future__ import annotations

import re
from collections.abc import Mapping
from decimal import Decimal
from typing import Any, Final

from fhirgallop.conformance import references
from fhirgallop.conformance.fhirpath import CannotJudge, ExpressionError, Item, compile_expression
from fhirgallop.conformance.fhirpath.frame import Frame, Run
from fhirgallop.conformance.fhirpath.quantity import Quantity
from fhirgallop.conformance.fhirpath.temporal import Temporal
from fhirgallop.conformance.node import Node
from fhirgallop.conformance.registry import registry
from fhirgallop.observations.editions import Edition

UCUM: Final = "http://unitsofmeasure.org"
MOST_EVALUATED: Final = 5_000  # expressions of one form

# A text in quotation marks, or a variable.
_PIECE: Final = re.compile(
    r"'(?:[^'\\]|\\.)*'|%(?:`([^`]{1,200})`|([A-Za-z_][A-Za-z0-9_]{0,200}))", re.DOTALL
)


class Answers:
    """What the answers of one response say to expressions."""

    def __init__(self, response: Mapping[str, Any], edition: Edition) -> None:
        self.definitions: Final = registry(edition).edition
        self._node = Node(response, "QuestionnaireResponse")
        self._scope = references.scope_of(self._node, self.definitions)
        self._steps = 0
        self._count = 0

    @property
    def whole(self) -> Item:
        """The response itself."""
        return Item.of(self._node)

    def item(self, value: Mapping[str, Any]) -> Item:
        """One item of the response."""
        return Item(value, None, "QuestionnaireResponse.item", self._node)

    def found(self, expression: str, focus: Any, names: Mapping[str, str]) -> list[Any]:
        """The results of an expression at `focus`, as expressions see them.

        Args:
            expression: FHIRPath; `%resource` is the response.
            focus: an Item, or what an expression gave.
            names: what variables stand for.

        Raises:
            CannotJudge: something it needs is not at hand, or the bound is reached.
            ExpressionError: it is no FHIRPath.
        """
        self._count += 1
        if self._count > MOST_EVALUATED:
            raise CannotJudge("the form asks for too many expressions")
        compiled = compile_expression(_named(expression, names))
        run = Run(self._node, self._scope, self._steps)
        run.context = [focus]
        try:
            return compiled.code(run.context, Frame(run, run.context))
        except RecursionError:
            raise CannotJudge("the response is nested too deeply for this expression") from None
        finally:
            self._steps = run.steps


def written(value: Any) -> Any:
    """A value of an expression as it stands in JSON."""
    if isinstance(value, Item):
        return value.value
    if isinstance(value, Temporal):
        return str(value).lstrip("@")
    if isinstance(value, Quantity):
        made: dict[str, Any] = {"value": value.value, "code": value.unit}
        return {**made, "system": UCUM} if value.unit else {"value": value.value}
    return value if isinstance(value, str | bool | int | Decimal) else None


def _named(expression: str, names: Mapping[str, str]) -> str:
    """The expression with the variables that are known replaced by what they stand for."""

    def replaced(piece: re.Match[str]) -> str:
        name = piece[1] or piece[2]
        return f"'{names[name]}'" if name in names else piece[0]

    return _PIECE.sub(replaced, expression) if names else expression


__all__ = ["Answers", "CannotJudge", "ExpressionError", "Item", "written"]
