"""Clause: every published invariant at every node, and invariants of profiles.

An invariant holds when its expression gives true. An empty result counts as failed (FHIR wants true), except
where a required element, or a primitive's value, is missing on the way: that is reported by its own rule.
What cannot be judged is a warning. Expressions with a known defect are run as `corrections` has them.
Source: FHIR ElementDefinition.constraint (R4, R4B, R5).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import lru_cache

from fhirgallop.conformance.corrections import corrected
from fhirgallop.conformance.editions.edition import Edition
from fhirgallop.conformance.editions.model import Invariant
from fhirgallop.conformance.fhirpath.expression import Expression, compile_expression
from fhirgallop.conformance.fhirpath.items import CannotJudge
from fhirgallop.conformance.fhirpath.model import model_of
from fhirgallop.conformance.fhirpath.parser import parse
from fhirgallop.conformance.fhirpath.presence import Answer, surely
from fhirgallop.conformance.fhirpath.tokens import ExpressionError
from fhirgallop.conformance.indexed_rules import verdict_by_index
from fhirgallop.conformance.node import Node, Scope
from fhirgallop.outcome import Issue

NOT_JUDGED = "invariant-not-judged"

# judged with the structure (ele-1) and with the narrative (txt-1, txt-2)
ELSEWHERE = frozenset(("ele-1", "txt-1", "txt-2"))


@dataclass(frozen=True, slots=True)
class Rule:
    """An invariant made ready for one type.

    Attributes:
        invariant: as published.
        surely: short cut from the keys of the object, or None.
        expression: compiled; None when it is not FHIRPath.
        fault: why it is not.
    """

    invariant: Invariant
    surely: Answer | None
    expression: Expression | None
    fault: str = ""

    def check(self, node: Node, scope: Scope) -> Issue | None:
        """The issue at a node, if the invariant does not hold or cannot be judged."""
        if self.expression is None:
            return _not_judged(node, self.invariant, self.fault)
        try:
            verdict = self.expression.verdict(node, scope)
        except CannotJudge as reason:
            return _not_judged(node, self.invariant, str(reason))
        return broken(node, self.invariant) if verdict in ("false", "empty") else None


def check(node: Node, scope: Scope) -> Iterator[Issue]:
    """Issues of all published invariants of a node: those of its type, then those of its place."""
    value = node.value if isinstance(node.value, dict) else None
    rules = _rules_of_type(scope.edition, node.type_name)
    if node.element is not None and node.element.invariants:
        rules += _ready(scope.edition, node.type_name, node.element.invariants)
    for rule in rules:
        if value is not None and rule.surely is not None and rule.surely(value):
            continue
        verdict = verdict_by_index(rule.invariant.key, node, scope)
        issue = rule.check(node, scope) if verdict is None else None
        if verdict is False:
            issue = broken(node, rule.invariant)
        if issue is not None:
            yield issue


def check_one(node: Node, invariant: Invariant, scope: Scope) -> Iterator[Issue]:
    """The issue of one invariant, from a profile, at a node."""
    issue = _rule(scope.edition, node.type_name, invariant).check(node, scope)
    if issue is not None:
        yield issue


@lru_cache(maxsize=8192)
def _rules_of_type(edition: Edition, type_name: str) -> tuple[Rule, ...]:
    definition = edition.type(type_name)
    return () if definition is None else _ready(edition, type_name, definition.invariants)


@lru_cache(maxsize=8192)
def _ready(edition: Edition, type_name: str, invariants: tuple[Invariant, ...]) -> tuple[Rule, ...]:
    return tuple(_rule(edition, type_name, i) for i in invariants if i.key not in ELSEWHERE)


@lru_cache(maxsize=8192)
def _rule(edition: Edition, type_name: str, invariant: Invariant) -> Rule:
    text = corrected(invariant.expression)
    if not text.strip():
        return Rule(invariant, None, None, "it has no expression")
    try:
        expression = compile_expression(text)
        fields = model_of(edition).fields(type_name)
        return Rule(invariant, surely(parse(text), fields) if fields else None, expression)
    except ExpressionError as error:
        return Rule(invariant, None, None, str(error))


def broken(node: Node, invariant: Invariant) -> Issue:
    """The issue of an invariant that does not hold at a node, however that was found."""
    human = " ".join(invariant.human.split()).rstrip(".") or f"Rule {invariant.key} does not hold"
    return Issue(
        invariant.severity,
        "invariant",
        invariant.key,
        f"{human}. Change this element, or what it depends on, until that is so.",
        node.expression,
    )


def _not_judged(node: Node, invariant: Invariant, reason: str) -> Issue:
    return Issue(
        "warning",
        "not-supported",
        NOT_JUDGED,
        f"Rule {invariant.key} was not judged: {reason}. Check it by hand.",
        node.expression,
    )
