"""Expression: a compiled FHIRPath expression."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Literal

from fhirgallop.conformance.fhirpath.compiler import compile_tree
from fhirgallop.conformance.fhirpath.frame import Code, Frame, Run
from fhirgallop.conformance.fhirpath.items import CannotJudge, Collection, truth
from fhirgallop.conformance.fhirpath.parser import parse
from fhirgallop.conformance.node import Node, Scope

Verdict = Literal["true", "false", "empty", "incomplete"]


@dataclass(frozen=True, slots=True, eq=False)
class Expression:
    """A compiled expression.

    Attributes:
        text: what was compiled.
        code: the closure.
    """

    text: str
    code: Code

    def evaluate(self, node: Node, scope: Scope) -> Collection:
        """The collection the expression gives at a node.

        Raises:
            CannotJudge: something it needs is not at hand, or its bound of time is reached.
        """
        return self._run(node, scope)[0]

    def verdict(self, node: Node, scope: Scope) -> Verdict:
        """What the expression says as a rule at a node.

        "incomplete" stands for anything but true that was found while a required element or the value of a
        primitive was missing: the rule has nothing to go by, and the missing part is reported by itself.

        Raises:
            CannotJudge: something it needs is not at hand, or its bound of time is reached.
        """
        result, run = self._run(node, scope)
        value = truth(result)
        if value is True:
            return "true"
        if run.incomplete:
            return "incomplete"
        return "empty" if value is None else "false"

    def _run(self, node: Node, scope: Scope) -> tuple[Collection, Run]:
        run = Run(node, scope, scope.memo.get(self, 0))
        before = run.steps
        try:
            return self.code(run.context, Frame(run, run.context)), run
        except RecursionError as error:
            raise CannotJudge("the record is nested too deeply for this rule") from error
        finally:
            if run.steps > before:
                scope.memo[self] = run.steps


@lru_cache(maxsize=4096)
def compile_expression(text: str) -> Expression:
    """The compiled form of an expression; the same text is compiled once.

    Raises:
        ExpressionError: the text is not FHIRPath.
    """
    return Expression(text, compile_tree(parse(text)))
