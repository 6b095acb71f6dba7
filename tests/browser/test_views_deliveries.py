"""The operator's page with deliveries on it: read, and given up by keyboard, in a real browser."""

from __future__ import annotations

import urllib.request
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from playwright.sync_api import Page, expect

# nobody listens there, and nobody here sends
SETTINGS = {"DELIVER_TO": "http://127.0.0.1:9/fhir", "LOOPBACK_HTTP": "true", "DELIVERY_WORKERS": "0"}


@pytest.fixture(scope="module")
def waiting(site: Any, root: Path) -> None:
    """One delivery that waits."""
    asked = urllib.request.Request(
        f"{site.address}/exams?map=fernwood-heart-form",
        data=(root / "examples/ehr/fernwood-exam.json").read_bytes(),
        headers={"Content-Type": "application/json"},
    )
    with urllib.request.urlopen(asked, timeout=60) as answer:
        assert answer.status == 200


@pytest.mark.usefixtures("waiting")
def test_the_list_of_deliveries_is_accessible(
    visit: Callable[..., Page], accessible: Callable[[Page], list[str]]
) -> None:
    for look in ({}, {"dark": True}, {"width": 360}):
        page = visit("/deliveries", **look)
        expect(page.get_by_role("button", name="Send now: delivery 1")).to_be_visible()
        page.evaluate("document.querySelectorAll('details').forEach(one => { one.open = true })")
        assert accessible(page) == [], look
        across = page.evaluate("document.documentElement.scrollWidth - document.documentElement.clientWidth")
        assert across == 0, look


@pytest.mark.usefixtures("waiting")
def test_a_delivery_is_given_up_by_keyboard_and_never_without_a_reason(visit: Callable[..., Page]) -> None:
    page = visit("/deliveries")
    page.get_by_text("Give up", exact=True).focus()
    page.keyboard.press("Enter")
    page.get_by_role("button", name="Give it up").focus()
    page.keyboard.press("Enter")  # the browser asks for the reason
    page.get_by_label("Why delivery 1 is given up").focus()
    page.keyboard.type("sent by hand")
    page.keyboard.press("Enter")
    expect(page.get_by_text("None.")).to_be_visible()
    page.get_by_role("definition").filter(has_text="1").get_by_role("link").focus()
    page.keyboard.press("Enter")
    expect(page.get_by_text("given up: sent by hand")).to_be_visible()
