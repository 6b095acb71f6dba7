"""The whole examinations seen as a clinic day: how often somebody is interrupted, what the sheet says."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from ruamel.yaml import YAML

from fhirgallop.cards.memory import Memory
from fhirgallop.cards.policy import decide
from fhirgallop.cards.sheet import sheet
from fhirgallop.reasoning.vocabulary import URGENT_PHRASE

FILE = Path(__file__).resolve().parent.parent / "cases" / "reasoning" / "whole-examinations.yaml"
CASES: list[dict[str, Any]] = YAML(typ="safe", pure=True).load(FILE.read_text(encoding="utf-8"))["cases"]
ORDINARY = [case for case in CASES if "raises" not in case]
NAMES = [str(case["name"]) for case in CASES]
Make = Callable[..., Any]


def _decided(made: Make, case: dict[str, Any]) -> tuple[Any, Any, Any]:
    patient = made(case.get("exam", []), case.get("chart", []))
    found = patient.review()
    return patient.exam, found, decide(found, Memory("p"), encounter="e", now=patient.context.now)


def test_ordinary_days_are_most_of_them_and_interrupt_nobody(made: Make) -> None:
    assert len(CASES) >= 30
    assert len(ORDINARY) * 2 >= len(CASES)
    for case in ORDINARY:
        _, _, decision = _decided(made, case)
        assert decision.cards == (), case["name"]


@pytest.mark.parametrize("case", CASES, ids=NAMES)
def test_one_card_interrupts_at_most_and_the_sheet_promises_nothing(made: Make, case: dict[str, Any]) -> None:
    exam, found, decision = _decided(made, case)
    loud = [card for card in decision.cards if card.level != "advisory"]
    assert len(loud) == (1 if {"U", "T1"} & set(case.get("raises", {})) else 0)
    text = sheet(exam, found, decision)
    assert "no reassurance" in text
    assert (URGENT_PHRASE in text.lower()) == ("U" in case.get("raises", {}))
    assert not any(word in text.lower() for word in ("impossible", "mistake", " wrong"))


def test_cards_of_all_whole_examinations(made: Make, record_property: Callable[[str, object], None]) -> None:
    """Printed: which card each examination gives, and how many interrupt."""
    lines = []
    for case in CASES:
        _, _, decision = _decided(made, case)
        shown = "; ".join(f"{card.level}: {card.title}" for card in decision.cards)
        lines.append(f"{case['name']:<88} {shown or '-'}")
    record_property("cards", "\n".join(lines))
    print("\n" + "\n".join(lines))
    assert len(lines) == len(CASES)
