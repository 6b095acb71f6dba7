"""The pages of clinicians, operators and reviewers in a real browser: read, answered, printed, judged."""

from __future__ import annotations

import json
import re
import urllib.request
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from playwright.sync_api import Page, expect

RECORD = "examples/ehr/fernwood-exam.json"
CHARTS = "examples/clinician"
ADDRESSES = (
    "/", "/exams", "/exams?patient=nobody", "/exams/{exam}", "/exams/not-there", "/knowledge",
    "/knowledge/s4.in-atrial-fibrillation", "/deliveries",
)  # fmt: skip


@pytest.fixture(scope="module")
def exam(site: Any, root: Path) -> str:
    """The example examination, kept; the name of its page."""
    asked = urllib.request.Request(
        f"{site.address}/exams?map=fernwood-heart-form",
        data=(root / RECORD).read_bytes(),
        headers={"Content-Type": "application/json"},
    )
    with urllib.request.urlopen(asked, timeout=60) as answer:
        assert json.load(answer)["bundle"]
    with urllib.request.urlopen(f"{site.address}/exams", timeout=60) as answer:
        found = re.search(r'href="/exams/([0-9a-f-]{36})"', answer.read().decode())
    assert found
    return found[1]


def _with_chart(page: Page, root: Path, name: str) -> None:
    page.get_by_label("This patient's chart").set_input_files(root / CHARTS / f"{name}.chart.json")
    page.get_by_role("button", name="Hold against it").click()
    page.wait_for_load_state()


@pytest.mark.parametrize("address", ADDRESSES)
def test_each_page_is_accessible_in_light_and_dark_and_on_a_phone(
    visit: Callable[..., Page], accessible: Callable[[Page], list[str]], exam: str, address: str
) -> None:
    for look in ({}, {"dark": True}, {"width": 360}):
        page = visit(address.format(exam=exam), **look)
        page.evaluate("document.querySelectorAll('details').forEach(one => { one.open = true })")
        assert accessible(page) == [], look
        across = page.evaluate("document.documentElement.scrollWidth - document.documentElement.clientWidth")
        assert across == 0, look


@pytest.mark.parametrize("chart", ["atrial-fibrillation-today", "urgent-combination"])
def test_cards_and_their_grounds_are_accessible(
    visit: Callable[..., Page], accessible: Callable[[Page], list[str]], exam: str, root: Path, chart: str
) -> None:
    for look in ({}, {"dark": True}, {"width": 360}):
        page = visit(f"/exams/{exam}", **look)
        _with_chart(page, root, chart)
        expect(page.locator("article.card").first).to_be_visible()
        page.evaluate("document.querySelectorAll('details').forEach(one => { one.open = true })")
        assert accessible(page) == [], look
        across = page.evaluate("document.documentElement.scrollWidth - document.documentElement.clientWidth")
        assert across == 0, look


def test_from_the_start_page_to_a_card_its_grounds_and_literature_by_keyboard_alone(
    visit: Callable[..., Page], exam: str, root: Path
) -> None:
    page = visit("/")
    page.get_by_role("link", name="Look up an examination").focus()
    page.keyboard.press("Enter")
    page.get_by_label("Patient's identifier").focus()
    page.keyboard.type("F-20417")
    page.keyboard.press("Enter")
    page.get_by_role("link", name="2026-03-14 09:30").focus()
    page.keyboard.press("Enter")
    page.wait_for_url(f"**/exams/{exam}")
    _with_chart(page, root, "atrial-fibrillation-today")
    page.get_by_text("The grounds of this card").first.focus()
    page.keyboard.press("Enter")
    link = page.get_by_role("link", name="rule s4.in-atrial-fibrillation").first
    expect(link).to_be_visible()
    link.focus()
    page.keyboard.press("Enter")
    page.wait_for_url("**/knowledge/s4.in-atrial-fibrillation")
    expect(page.get_by_text("McGee, Evidence-Based Physical Diagnosis").first).to_be_visible()


def test_an_answer_stands_there_at_once_and_is_counted_and_the_chart_stays(
    visit: Callable[..., Page], accessible: Callable[[Page], list[str]], exam: str, root: Path
) -> None:
    page = visit(f"/exams/{exam}")
    _with_chart(page, root, "atrial-fibrillation-today")
    card = page.locator("article.card").first
    card.get_by_label("Your reason").fill("Heard again in the left lateral position")
    card.get_by_role("button", name="Seen").click()
    said = card.get_by_role("status").get_by_text("Heard again in the left lateral position")
    expect(said).to_be_visible()
    expect(page.get_by_text("Held against the chart, as far as it could be read")).to_be_visible()
    page.goto("/knowledge/s4.in-atrial-fibrillation")
    expect(page.get_by_role("img", name="The rule s4.in-atrial-fibrillation by month")).to_be_visible()
    assert accessible(page) == []


def test_everything_works_without_script(visit: Callable[..., Page], exam: str, root: Path) -> None:
    page = visit(f"/exams/{exam}", script=False)
    _with_chart(page, root, "atrial-fibrillation-today")
    card = page.locator("article.card").first
    card.get_by_label("Your reason").fill("Without any script")
    card.get_by_role("button", name="Both entries are true today").click()
    page.wait_for_url(f"**/exams/{exam}*")
    _with_chart(page, root, "atrial-fibrillation-today")
    expect(page.locator("article.card").first.get_by_text("Without any script")).to_be_visible()


def test_the_drawing_is_named_and_told_for_screen_readers(visit: Callable[..., Page], exam: str) -> None:
    page = visit(f"/exams/{exam}")
    drawing = page.get_by_role("img", name="Heart cycle of this examination")
    expect(drawing).to_be_visible()
    page.get_by_text("The same in words").click()
    expect(
        page.get_by_role("listitem").get_by_text("Fourth heart sound present (left-sided)")
    ).to_be_visible()


def test_on_paper_there_are_the_findings_and_no_buttons(
    visit: Callable[..., Page], exam: str, root: Path
) -> None:
    page = visit(f"/exams/{exam}")
    _with_chart(page, root, "atrial-fibrillation-today")
    page.emulate_media(media="print")
    for name in ("Hold against it", "Seen: I looked or listened again"):
        expect(page.get_by_role("button", name=name).first).to_be_hidden()
    for heading in ("Cards", "Heart cycle", "Findings", "What cannot all hold"):
        expect(page.get_by_role("heading", name=heading, exact=True)).to_be_visible()
    assert len(page.pdf(format="A4")) > 10_000


def test_rules_are_searched(visit: Callable[..., Page]) -> None:
    page = visit("/knowledge")
    page.get_by_label("Words").fill("fourth fibrillation")
    page.get_by_role("button", name="Search").click()
    expect(page.get_by_role("link", name="A fibrillating atrium quivers").first).to_be_visible()
