"""Our verdicts on the published invariants beside those of the general-purpose library fhirpathpy.

The case file of the invariants is run through both. Left out, each with its reason, is what that library does
not implement or gets wrong (observed with fhirpathpy 2.2.4).
"""

from __future__ import annotations

import json
import re
from pathlib import Path
from typing import Any

import fhirpathpy
import pytest
from fhirpathpy.models import models

from fhirgallop.conformance.corrections import corrected
from fhirgallop.conformance.editions.edition import Edition, load
from fhirgallop.conformance.fhirpath import compile_expression
from fhirgallop.conformance.node import Node, Scope

CASES = Path(__file__).parents[1] / "conformance" / "invariants" / "cases.jsonl"

LEFT_OUT = {
    "hasValue": "not implemented",
    "htmlChecks": "not implemented",
    "resolve": "not implemented",
    "lowBoundary": "not implemented",
    "highBoundary": "not implemented",
    "comparable": "not implemented",
    "memberOf": "not implemented",
    "allFalse": "fails where `in` is used inside select",
    "%resource": "the case stands inside a resource",
    "%rootResource": "not known",
    "%context": "the case stands inside a resource",
    "as(": "raises for several items",
    "$this.where(element[0]": "raises at a leading $this",
    "repeat(answer": "loses the choice type of answer.value below repeat",
    "[^": "needless escapes in a pattern",
    "start <= end": "compares texts, not moments",
    "lastModified >=": "compares texts, not moments",
    ">= whenPrepared": "compares texts, not moments",
}


def _library_verdict(expression: str, case: dict[str, Any], value: Any, edition: str) -> bool:
    model = models["r5" if edition == "R5" else "r4"]
    text = re.sub(r"\.trace\([^()]*\)", "", expression)
    resource = value if "resourceType" in value else {"base": case["at"], "expression": text}
    if "resourceType" in value:
        return fhirpathpy.evaluate(resource, text, {}, model) == [True]
    return fhirpathpy.evaluate(value, resource, {}, model) == [True]


def _own_verdict(expression: str, case: dict[str, Any], value: Any, edition: Edition) -> bool:
    node = Node(value, case["at"])
    scope = Scope(edition, node, lambda owner, reference: None)
    return compile_expression(expression).verdict(node, scope) == "true"


def _expression(case: dict[str, Any], edition: Edition) -> str:
    definition = edition.type(case["at"])
    assert definition is not None
    return next(corrected(i.expression) for i in definition.invariants if i.key == case["key"])


@pytest.mark.parametrize("name", ["R4", "R5"])
def test_verdicts_equal_those_of_the_library(name: str) -> None:
    edition = load(name)
    compared = 0
    differ = []
    for line in CASES.read_text(encoding="utf-8").splitlines():
        case = json.loads(line)
        if name not in case["editions"] or "child" in case or case["root"] != case["at"]:
            continue
        expression = _expression(case, edition)
        if any(part in expression for part in LEFT_OUT):
            continue
        for value in (case["holds"], case["fails"]):
            if not isinstance(value, dict):
                continue
            compared += 1
            own = _own_verdict(expression, case, value, edition)
            try:
                theirs = _library_verdict(expression, case, value, name)
            except Exception as error:  # noqa: BLE001 - whatever the library raises is a difference to look at
                differ.append((case["key"], type(error).__name__, str(error)[:80]))
                continue
            if own is not theirs:
                differ.append((case["key"], own, value))
    assert differ == []
    assert compared > 250
