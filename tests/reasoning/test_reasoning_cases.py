"""Every case of tests/cases/reasoning: what is raised, and that nothing else is."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from ruamel.yaml import YAML

FOLDER = Path(__file__).resolve().parent.parent / "cases" / "reasoning"
_CASE_KEYS = {"name", "row", "table", "exam", "chart", "raises", "panel", "open", "about"}


def _cases() -> list[Any]:
    found = []
    for path in sorted(FOLDER.glob("*.yaml")):
        content = YAML(typ="safe", pure=True).load(path.read_text(encoding="utf-8"))
        for case in content["cases"]:
            assert set(case) <= _CASE_KEYS, f"{path.name}: {case.get('name')} has an unknown key"
            found.append(pytest.param(content["prefix"], case, id=f"{path.stem}: {case['name']}"))
    return found


CASES = _cases()


@pytest.mark.parametrize(("prefix", "case"), CASES)
def test_raises_exactly_what_its_row_says(
    prefix: str, case: dict[str, Any], made: Callable[..., Any]
) -> None:
    found = made(case.get("exam", []), case.get("chart", [])).review()
    raised: dict[str, list[str]] = {}
    for conclusion in found.raised:
        raised.setdefault(conclusion.tier.value, []).append(conclusion.rule.id)
    expected = {tier: sorted(ids) for tier, ids in case.get("raises", {}).items() if ids}
    assert {tier: sorted(set(ids)) for tier, ids in raised.items()} == expected
    if "panel" in case:
        panel = {c.rule.id for c in found.panel if c.rule.id.startswith(prefix)}
        assert panel == set(case["panel"])
    assert set(case.get("open", [])) <= {c.rule.id for c in found.open}


def test_interruptive_cards_by_case_set(
    record_property: Callable[[str, object], None], made: Callable[..., Any]
) -> None:
    """A table of interruptive cards by case set; a case interrupts at most once for one family."""
    table: Counter[tuple[str, int]] = Counter()
    for param in CASES:
        _prefix, case = param.values
        found = made(case.get("exam", []), case.get("chart", [])).review()
        loud = {c.rule.family or c.rule.id for c in found.raised if c.tier.value in ("U", "T1")}
        table[str(param.id).partition(":")[0], len(loud)] += 1
    lines = ["case set                       interruptive cards: cases"]
    for (name, cards), count in sorted(table.items()):
        lines.append(f"{name:<30} {cards:>18}: {count}")
    record_property("interruptive", "\n".join(lines))
    print("\n" + "\n".join(lines))
    assert sum(table.values()) == len(CASES)
