"""The desk's pages one by one: phone width, dark, without script, and against WCAG 2.2 AA (by axe-core)."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
from playwright.sync_api import Page, expect

FORM = Path(__file__).parent / "forms" / "holmby-ward.csv"


def bring_in(page: Page, name: str, *files: Path) -> str:
    page.get_by_label("What the form is called").fill("Holmby ward")
    page.get_by_label("Short name of the map").fill(name)
    page.get_by_label("Sample records").set_input_files(files or FORM)
    page.get_by_label("Where your clinic's numbers belong").fill("https://holmby.example")
    page.get_by_role("button", name="Bring it in").click()
    page.wait_for_url("**/desk/drafts/*")
    return page.url.partition("?")[0]


@pytest.fixture
def draft(visit: Any) -> str:
    """Address of a draft of the invented form."""
    page = visit("/desk")
    address = bring_in(page, "pages")
    page.goto(f"{address}?field=mm_when&show=all")
    page.locator("button.offer").first.click()
    expect(page.locator("#bench [role=status]")).to_contain_text("mm_when: timing")
    return address


@pytest.mark.parametrize(("width", "dark"), [(1280, False), (1280, True), (360, False), (360, True)])
def test_every_page_is_accessible(visit: Any, accessible: Any, draft: str, width: int, dark: bool) -> None:
    for path in (
        "/desk", draft, f"{draft}?pane=text", f"{draft}?field=tone3&show=all",
        f"{draft}?field=mm_when&show=all",
        f"{draft}/coverage", f"{draft}/publish", "/desk/maps/fernwood-heart-form", "/desk/drafts/none",
    ):  # fmt: skip
        page: Page = visit(path, width=width, dark=dark)
        assert accessible(page) == [], path
        wide = page.evaluate("document.documentElement.scrollWidth - document.documentElement.clientWidth")
        assert wide <= 0, path
        sheet = page.locator(".sheet").first
        if sheet.count():
            assert sheet.evaluate("one => one.scrollWidth <= one.clientWidth"), path


def test_everything_works_without_script(visit: Any, draft: str) -> None:
    page: Page = visit(f"{draft}?field=tone4&show=all", script=False)
    page.locator("#target").fill("Fourth heart sound · heart-sound.s4")
    page.locator("form", has=page.locator("#target")).get_by_role("button").click()
    expect(page.locator("#bench [role=status]")).to_contain_text("tone4: Fourth heart sound")
    page.get_by_role("button", name="Undo").click()
    expect(page.locator(".key").first).to_contain_text("1 mapped")
    page.get_by_role("button", name="Redo").click()
    expect(page.locator(".key").first).to_contain_text("2 mapped")
    page.get_by_role("link", name="The map's text").click()
    box = page.get_by_label("The map as it is kept")
    box.fill(box.input_value().replace("lines:", "# a remark of mine\nlines:"))
    page.get_by_role("button", name="Keep the text").click()
    assert "# a remark of mine" in page.get_by_label("The map as it is kept").input_value()


def test_text_and_fields_are_one(visit: Any, draft: str) -> None:
    page: Page = visit(f"{draft}?field=tone3&pane=text&show=all")
    box = page.get_by_label("The map as it is kept")
    line = (
        "lines:  # mine\n  - finding: heart-sound.s3  # third\n    field: tone3\n    choice: {ja: present}\n"
    )
    box.fill(box.input_value().replace("lines:\n", line))
    page.get_by_role("button", name="Keep the text").click()
    expect(page.locator(".list [aria-current]")).to_contain_text("Third heart sound")
    page.locator("table.meanings select").first.select_option("absent")
    page.get_by_role("button", name="Keep these").click()
    expect(page.get_by_label("The map as it is kept")).to_have_value(
        page.get_by_label("The map as it is kept").input_value()
    )
    expect(page.locator("#bench [role=status]")).to_contain_text("what its wordings mean")
    text = page.get_by_label("The map as it is kept").input_value()
    assert "# mine" in text
    assert "# third" in text
    assert "absent" in text


def test_a_text_that_cannot_be_read_is_kept_in_the_box(visit: Any, draft: str) -> None:
    page: Page = visit(f"{draft}?pane=text")
    page.get_by_label("The map as it is kept").fill("lines: [")
    page.get_by_role("button", name="Keep the text").click()
    expect(page.locator("main")).to_contain_text("To be mended before the map can be used")
    assert page.get_by_label("The map as it is kept").input_value() == "lines: ["
    page.get_by_role("button", name="Undo").click()
    expect(page.locator("#chosen")).to_have_text("pt_no")


def test_what_records_hold_is_never_markup(visit: Any, tmp_path: Path) -> None:
    bad = tmp_path / "bad.csv"
    bad.write_text("id;<b>x</b>\n1;<script>document.title='taken'</script>\n", "utf-8")
    page: Page = visit("/desk")
    bring_in(page, "bad", bad)
    page.get_by_role("link", name="<b>x</b>").click()
    expect(page.locator("#chosen")).to_have_text("<b>x</b>")
    assert "taken" not in page.title()


def test_a_long_form_stays_light(visit: Any, tmp_path: Path) -> None:
    long = tmp_path / "dictionary.csv"
    rows = [f"field_{n};Something number {n};yes|no" for n in range(5000)]
    long.write_text("name;label;values\n" + "\n".join(rows), "utf-8")
    page: Page = visit("/desk")
    page.get_by_label("And, or instead").set_input_files(long)
    page.get_by_label("Short name of the map").fill("long")
    page.get_by_label("Where your clinic's numbers belong").fill("https://holmby.example")
    page.get_by_role("button", name="Bring it in").click()
    page.wait_for_url("**/desk/drafts/*")
    expect(page.locator("main")).to_contain_text("1 to 100 of 5000")
    assert len(page.content().encode()) < 100_000
    page.get_by_label("Find a field").fill("field_4999")
    page.get_by_role("button", name="Show").click()
    expect(page.locator(".list li")).to_have_count(1)
