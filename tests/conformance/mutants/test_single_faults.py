"""Single-fault mutants: each gives exactly its own issue, at its own node, whatever form it comes in.

The tables stand in tests/cases/conformance/mutants; `conftest.py` reads them. All resources are invented.
"""

from __future__ import annotations

import warnings
from collections import Counter
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from fhirpathpy import evaluate
from fhirpathpy.models import models

from fhirgallop.conformance import validate
from fhirgallop.conformance.registry import registry
from fhirgallop.conformance.source import read
from fhirgallop.conformance.validator import thorough
from fhirgallop.outcome import Issue

FEWEST = 400
MODELS = {"R4": models["r4"], "R4B": models["r4"], "R5": models["r5"]}
CLAUSES = (
    "unknown elements",
    "resource types",
    "cardinality",
    "JSON shape",
    "JSON text",
    "choice types",
    "primitives",
    "calendar",
    "companions",
    "required bindings",
    "extensible bindings",
    "invariants",
    "reference targets",
    "contained",
    "extensions",
    "narrative",
    "bundles",
    "vital signs",
    "not judged",
    "profile bounds and types",
    "profile values and bindings",
    "slicing",
    "profile invariants",
    "own profiles",
)


def _bare(issues: list[Issue]) -> list[tuple[str, str, str, str]]:
    return [(i.severity, i.rule, i.expression, i.text) for i in issues]


def _judged(mutant: Any, resource: Any, packages: tuple[Path, ...]) -> list[Issue]:
    return validate(resource, mutant.edition, mutant.profiles, packages if mutant.profiles else ())


def _leaves(value: Any) -> Iterator[str]:
    if isinstance(value, dict):
        for inner in value.values():
            yield from _leaves(inner)
    elif isinstance(value, list):
        for inner in value:
            yield from _leaves(inner)
    elif value is not None and not isinstance(value, bool):
        yield str(value)


def test_base_is_accepted(base: Any, packages: tuple[Path, ...]) -> None:
    for form in (base.text, base.text.decode(), base.resource):
        assert _judged(base, form, packages) == []


def test_one_fault_gives_one_issue(
    mutant: Any, packages: tuple[Path, ...], plain_url: Any, nodes_at: Any
) -> None:
    issues = _judged(mutant, mutant.text, packages)
    assert [(i.severity, i.rule, i.expression) for i in issues] == [mutant.expected]
    (issue,) = issues
    assert issue.code
    assert issue.text.endswith(".")
    _same_in_every_form_and_pass(mutant, issues, packages)
    _same_when_the_resource_names_the_profile(mutant, packages)
    _one_node(mutant, issue, nodes_at)
    _no_patient_data(mutant, issue, plain_url)


def _same_in_every_form_and_pass(mutant: Any, found: list[Issue], packages: tuple[Path, ...]) -> None:
    known = registry(mutant.edition, packages) if mutant.profiles else registry(mutant.edition)
    assert thorough(read(mutant.text), known, mutant.profiles) == found
    if mutant.resource is not None:
        assert _bare(_judged(mutant, mutant.resource, packages)) == _bare(found)
    if "write" not in mutant.row:
        assert _judged(mutant, mutant.text.decode(), packages) == found


def _same_when_the_resource_names_the_profile(mutant: Any, packages: tuple[Path, ...]) -> None:
    if mutant.profiles and mutant.resource is not None:
        declared = {**mutant.resource, "meta": {"profile": list(mutant.profiles)}}
        issues = validate(declared, mutant.edition, packages=packages)
        assert [(i.severity, i.rule, i.expression) for i in issues] == [mutant.expected]


def _one_node(mutant: Any, issue: Issue, nodes_at: Any) -> None:
    if mutant.resource is None or not issue.expression:
        assert {"text", "write"} & mutant.row.keys() or issue.severity == "fatal"
        return
    assert issue.line >= 1
    assert issue.column >= 1
    nodes = nodes_at(mutant.resource, issue.expression)
    assert len(nodes) == 1
    if not nodes[0].beside:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            found = evaluate(mutant.resource, issue.expression, model=MODELS[mutant.edition])
        # the evaluator gives a primitive and its `_x` as two nodes
        assert len(found) - (len(found) == 2 and isinstance(found[1], dict)) == 1


def _no_patient_data(mutant: Any, issue: Issue, plain_url: Any) -> None:
    said = plain_url.sub("", issue.text)
    for leaf in _leaves(mutant.resource):
        # names, dates, ids and numbers of the bases all hold "quill" or a digit; one digit alone says nothing
        if "quill" in leaf.lower() or (len(leaf) > 1 and any(c.isdigit() for c in leaf)):
            assert leaf not in said
    assert "quill" not in said.lower()


def test_enough_mutants_in_every_clause_and_edition(
    every_mutant: tuple[Any, ...], every_base: dict[tuple[str, str], Any], capsys: pytest.CaptureFixture[str]
) -> None:
    counts = Counter((m.clause, m.edition) for m in every_mutant)
    rows = {(m.clause, id(m.row)) for m in every_mutant}
    by_clause = Counter(clause for clause, _ in rows)
    lines = [f"{'clause':32}{'rows':>6}" + "".join(f"{e:>6}" for e in ("R4", "R4B", "R5"))]
    lines += [
        f"{clause:32}{by_clause[clause]:6}" + "".join(f"{counts[clause, e]:6}" for e in ("R4", "R4B", "R5"))
        for clause in CLAUSES
    ]
    lines.append(f"{len(rows)} faults, {len(every_mutant)} mutants over the editions")
    types = {resource["resourceType"] for resource in every_base.values()}
    lines.append(f"{len(every_base)} bases of {len(types)} resource types")
    with capsys.disabled():
        print("\n" + "\n".join(lines))
    assert {m.clause for m in every_mutant} == set(CLAUSES)
    assert len(rows) >= FEWEST
    assert len(types) >= 25
    assert [key for key in ((c, e) for c in CLAUSES for e in ("R4", "R4B", "R5")) if not counts[key]] == []
