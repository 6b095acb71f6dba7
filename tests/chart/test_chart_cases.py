"""Every case of tests/cases/chart: the facts whole and in order, and the rules of all issues."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from ruamel.yaml import YAML

FOLDER = Path(__file__).resolve().parent.parent / "cases" / "chart"
KEYS = {"name", "about", "chart", "facts", "issues"}


def cases() -> list[Any]:
    found = []
    for path in sorted(FOLDER.glob("*.yaml")):
        for case in YAML(typ="safe", pure=True).load(path.read_text(encoding="utf-8"))["cases"]:
            assert set(case) <= KEYS, f"{path.name}: {case.get('name')} has an unknown key"
            found.append(pytest.param(case, id=f"{path.stem}: {case['name']}"))
    return found


@pytest.mark.parametrize("case", cases())
def test_chart_gives_exactly_these_facts(
    case: dict[str, Any],
    chart_of: Callable[..., Any],
    lines: Callable[[Any], list[str]],
    rules_of: Callable[[Any], set[str]],
) -> None:
    chart = chart_of(case["chart"])
    found = lines(chart)
    assert found == case["facts"]
    assert rules_of(chart) == set(case.get("issues", []))
