"""Examples that HL7 publishes: accepted as they are, and refused with one thing broken.

Source: published/SOURCE.md. The whole packages are swept by sweep_examples.py (by hand: it takes minutes).
"""

from __future__ import annotations

import csv
from pathlib import Path
from typing import Any

import orjson
import pytest

from fhirgallop.conformance import validate
from fhirgallop.conformance.editions import load

HERE = Path(__file__).parent
SAMPLES = sorted((HERE / "published").glob("*.json"))


@pytest.mark.parametrize("path", SAMPLES, ids=lambda p: p.stem)
def test_a_published_example_is_accepted(path: Path) -> None:
    edition = path.stem.partition("-")[0]
    for resource in (path.read_bytes(), orjson.loads(path.read_bytes())):
        assert [str(i) for i in validate(resource, edition) if i.is_error] == []


@pytest.mark.parametrize("path", SAMPLES, ids=lambda p: p.stem)
def test_a_published_example_with_a_fault_is_refused_at_its_place(path: Path) -> None:
    edition = path.stem.partition("-")[0]
    resource: dict[str, Any] = orjson.loads(path.read_bytes())
    kind = resource["resourceType"]
    definition = load(edition).type(kind)
    assert definition is not None
    before = {(i.rule, i.expression) for i in validate(resource, edition) if i.is_error}
    cases: list[tuple[dict[str, Any], tuple[str, str]]] = [
        ({**resource, "notAnElement": 1}, ("unknown-element", kind)),
        ({**resource, "language": "not a language"}, ("primitive-format", f"{kind}.language")),
        ({**resource, "language": None}, ("json-null", kind)),
    ]
    cases[1] = ({**resource, "language": " de"}, ("primitive-format", f"{kind}.language"))
    for name, element in definition.elements.items():
        if element.min and not element.is_choice and name in resource:
            without = {k: v for k, v in resource.items() if k != name}
            cases.append((without, ("cardinality-min", kind)))
    for faulty, wanted in cases:
        found = {(i.rule, i.expression) for i in validate(faulty, edition) if i.is_error}
        assert wanted in found - before


def test_the_list_of_faulty_examples_names_a_rule_and_a_reason_for_each() -> None:
    with (HERE / "faulty_examples.csv").open(encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert len({(row["edition"], row["file"], row["rule"]) for row in rows}) == len(rows)
    assert all(row["edition"] in ("R4", "R4B", "R5") and row["rule"] and row["reason"] for row in rows)
