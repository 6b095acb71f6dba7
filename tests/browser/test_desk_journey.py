"""From a form that nobody has seen to coded examinations: brought in, mapped, tried, compared, published.

The form (forms/holmby-ward.csv) is invented: 40 fields in wordings of its own, 12 records.
"""

from __future__ import annotations

import csv
import json
import urllib.request
from collections.abc import Callable
from functools import partial
from pathlib import Path
from typing import Any

from playwright.sync_api import Page, expect

FORM = Path(__file__).parent / "forms" / "holmby-ward.csv"

# field -> what a person who knows the form says of it
MEANT = {
    "pt_no": "part:patient",
    "form_serial": "part:identifier",
    "seen_on": "part:time",
    "seen_at": "part:time",
    "doc_initials": "part:examiner",
    "case_ref": "part:encounter",
    "sheet_state": "part:status",
    "rr_lying": "pressure.systolic",
    "beats_counted": "vital.heart-rate",
    "o2_sat_pct": "vital.oxygen-saturation",
    "beat_feels": "rhythm.regularity",
    "neck_veins_full": "jvp.distension",
    "vein_height_cm": "jvp.height",
    "belly_press_test": "jvp.abdominojugular-reflux",
    "carotid_rise": "pulse.carotid-upstroke",
    "neck_noise_left": "bruit.carotid",
    "neck_noise_right": "bruit.carotid",
    "apex_shifted": "apex.displacement",
    "apex_sustained_push": "heave.left-ventricular",
    "rv_lift": "heave.right-ventricular",
    "thrill_felt": "thrill",
    "tone1_loudness": "heart-sound.s1-intensity",
    "tone2_gap": "heart-sound.s2-splitting",
    "pulm_tone_loud": "ignore:Said by another field",
    "tone3": "heart-sound.s3",
    "tone4": "heart-sound.s4",
    "syst_click": "heart-sound.mid-systolic-click",
    "snap_after_tone2": "heart-sound.opening-snap",
    "rubbing_noise": "heart-sound.pericardial-rub",
    "mm_any": "murmur",
    "mm_when": "murmur#timing",
    "mm_loud": "murmur#grade",
    "mm_best_spot": "murmur#site",
    "mm_spreads": "murmur#radiation",
    "mm_outline": "murmur#shape",
    "base_crackles": "lung.crackles",
    "ankles_pit": "oedema.lower-limb",
    "ef_last_echo": "echo.lvef",
    "free_words": "remark",
    "payer_code": "ignore:Billing",
}
# wordings that no list of ours knows -> what they mean
WORDINGS = {
    "slow": "delayed",
    "collapsing": "brisk",
    "physiologic": "physiological",
    "fixed": "wide-fixed",
    "apex": "mitral",
    "aortic area": "aortic",
    "erb": "erb",
    "pulmonary area": "pulmonary",
    "axilla": "axilla",
    "carotids": "carotids",
    "yes": "lateral",
    "no": "none",
}


def heading(page: Page) -> str:
    return page.locator("#chosen").inner_text()


def bring_in(page: Page, name: str) -> None:
    page.get_by_label("What the form is called").fill("Holmby ward, heart sheet")
    page.get_by_label("Short name of the map").fill(name)
    page.get_by_label("Sample records").set_input_files(FORM)
    page.get_by_label("Where your clinic's numbers belong").fill("https://holmby.example")
    page.get_by_label("Time zone").fill("Europe/Vienna")
    page.get_by_role("button", name="Bring it in").click()
    expect(page.locator("#chosen")).to_have_text("pt_no")


def after(page: Page, act: Callable[[], None]) -> None:
    """Does something that changes the draft, and waits until the bench is there anew."""
    step = page.locator("#bench input[name=step]").first.input_value()
    act()
    page.wait_for_function(
        "old => { const one = document.querySelector('#bench input[name=step]');"
        " return one && one.value !== old && !document.querySelector('.htmx-request'); }",
        arg=step,
    )


def map_one(page: Page, name: str) -> int:
    """Says what one field means, with the mouse; returns the number of actions."""
    meant = MEANT[name]
    kind, _, rest = meant.partition(":")
    if kind == "part":
        page.get_by_label("A part of the record").select_option(f"record#{rest}")
        button = page.locator("form", has=page.locator("#part")).get_by_role("button")
    elif kind == "ignore":
        page.get_by_label("Leave it out, because").fill(rest)
        button = page.get_by_role("button", name="Leave out")
    elif kind == "remark":
        button = page.locator("form", has=page.locator("#of")).get_by_role("button")
    else:
        offer = page.locator(f"form:has(input[name=target][value='{meant}']) button.offer")
        if offer.count():
            after(page, offer.first.click)
            return 1
        if "#" in meant:
            axis = meant.partition("#")[2]
            option = page.locator(f"#property option[value$='|{axis}']").evaluate_all(
                "(all, finding) => all.find(one => one.parentElement.label.startsWith(finding)).value",
                "Heart murmur",
            )
            page.locator("#property").select_option(option)
            button = page.locator("form", has=page.locator("#property")).get_by_role("button")
        else:
            option = page.locator(f"#findings option[value$='· {meant}']").get_attribute("value") or ""
            page.locator("#target").fill(option)
            button = page.locator("form", has=page.locator("#target")).get_by_role("button")
    after(page, button.click)
    return 2


def settle(page: Page, name: str) -> int:
    """Gives meanings to wordings that are open still; returns the number of actions."""
    if heading(page) != name:
        return 0
    done = 0
    for row in page.locator("table.meanings tbody tr").all():
        box = row.locator("select")
        wording = row.locator("input[name^=wording]").input_value()
        if box.count() and not box.input_value():
            box.select_option(WORDINGS[wording])
            done += 1
    if done:
        after(page, page.get_by_role("button", name="Keep these").click)
    return done + 1


def text_of(page: Page) -> str:
    page.get_by_role("link", name="The map's text").click()
    return page.get_by_label("The map as it is kept").input_value()


def post(address: str, name: str, row: dict[str, str]) -> dict[str, Any]:
    body = json.dumps(row).encode()
    request = urllib.request.Request(
        f"{address}/exams?map={name}", body, {"Content-Type": "application/json"}
    )
    with urllib.request.urlopen(request, timeout=30) as answer:
        found: dict[str, Any] = json.load(answer)
    return found


def with_chart(address: str, name: str, row: dict[str, str], root: Path) -> dict[str, Any]:
    """The same with the chart of an example patient, who is made the patient of the record."""
    chart = (root / "examples/clinician/atrial-fibrillation-today.chart.json").read_text("utf-8")
    chart = chart.replace("https://fernwood.example/patients", "https://holmby.example/patients")
    chart = chart.replace("F-20417", row["pt_no"])
    record = json.dumps({**row, "seen_on": "14.03.2026", "seen_at": "12:00", "form_serial": "S-6001"})
    parts = "".join(
        f'--parted\r\nContent-Disposition: form-data; name="{part}"; filename="a.json"\r\n\r\n{text}\r\n'
        for part, text in (("record", record), ("chart", chart))
    )
    request = urllib.request.Request(
        f"{address}/exams?map={name}",
        f"{parts}--parted--\r\n".encode(),
        {"Content-Type": "multipart/form-data; boundary=parted"},
    )
    with urllib.request.urlopen(request, timeout=30) as answer:
        found: dict[str, Any] = json.load(answer)
    return found


def rows() -> list[dict[str, str]]:
    with FORM.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file, delimiter=";"))


def test_from_a_foreign_form_to_cards(visit: Any, site: Any, accessible: Any, root: Path) -> None:
    page: Page = visit("/desk")
    bring_in(page, "holmby")
    assert accessible(page) == []
    actions = 0
    for name in MEANT:
        expect(page.locator("#chosen")).to_have_text(name)
        actions += map_one(page, name)
        actions += settle(page, name)
    print("actions of the person:", actions)
    assert page.locator(".key").first.inner_text().split()[:5] == ["38", "mapped", "2", "ignored", "0"]
    assert "mended" not in page.locator("#bench").inner_text()
    # tried, on a record with a third sound and a murmur
    page.goto(page.url.split("?")[0] + "?record=2")
    tried = page.locator(".coded").inner_text()
    assert "Third heart sound: Present" in tried
    assert "SNOMED CT" in tried
    assert accessible(page) == []
    page.get_by_role("link", name="Coverage", exact=True).click()
    assert "12 coded" in page.locator("main").inner_text()
    assert accessible(page) == []
    page.get_by_role("link", name="Publish", exact=True).click()
    assert accessible(page) == []
    page.get_by_label("Your name").fill("R. Example")
    page.get_by_label("What is new, or why").fill("First map of the new sheet")
    page.get_by_role("button", name="Publish", exact=True).click()
    expect(page.locator("main")).to_contain_text("Version 1 is in use")
    assert accessible(page) == []
    # in use at once: the record is coded, and its cards come with the answer
    answer = post(site.address, "holmby", rows()[10])
    kinds = [entry["resource"]["resourceType"] for entry in answer["bundle"]["entry"]]
    assert kinds.count("Observation") > 20
    review = with_chart(site.address, "holmby", rows()[0], root)["review"]
    assert review["cards"][0]["title"] == "Entries that need the atria to contract"
    assert any("Fourth heart sound: present" in entry for entry in review["cards"][0]["entries"])


def press(page: Page, *keys: str) -> None:
    for key in keys:
        page.keyboard.press(key)


def tab_to(page: Page, selector: str) -> None:
    """Tabs on until something has the focus; nothing may hold the focus back."""
    for _ in range(400):
        if page.evaluate("wanted => document.activeElement.matches(wanted)", selector):
            return
        page.keyboard.press("Tab")
    raise AssertionError(f"the keyboard does not reach {selector}")


def choose(page: Page, selector: str, option: str) -> None:
    """Tabs to a list of choices and goes down to one of them."""
    tab_to(page, selector)
    all_ = page.locator(f"{selector} option").all()
    wanted = page.locator(f"{selector} option{option}").first.get_attribute("value")
    place = [one.get_attribute("value") for one in all_].index(wanted)
    press(page, *["Home"], *["ArrowDown"] * place)
    assert page.locator(selector).input_value() == wanted


def map_by_keys(page: Page, name: str) -> None:
    """The same with the keyboard alone: the focus stands on the field's heading."""
    meant = MEANT[name]
    kind, _, rest = meant.partition(":")
    for place, offer in enumerate(page.locator("form:has(button.offer) input[name=target]").all(), 1):
        if offer.input_value() in (meant, f"record#{rest}"):
            after(page, partial(press, page, str(place)))
            return
    if kind == "ignore":
        press(page, "i")
        page.keyboard.type(rest)
    elif kind == "part":
        choose(page, "#part", f"[value='record#{rest}']")
        press(page, "Tab")
    elif kind == "remark":
        tab_to(page, "#of")
        press(page, "Tab")
    elif "#" in meant:
        at = (
            page.locator("#property optgroup[label^='Heart murmur'] option").first.get_attribute("value")
            or ""
        )
        choose(page, "#property", f"[value='{at.partition('|')[0]}|{meant.partition('#')[2]}']")
        press(page, "Tab")
    else:
        press(page, "f")
        page.keyboard.type(page.locator(f"#findings option[value$='· {meant}']").get_attribute("value") or "")
        press(page, "Escape", "f")  # shuts the browser's list of findings
    after(page, lambda: press(page, "Enter"))


def settle_by_keys(page: Page, name: str) -> None:
    open_rows = page.locator("table.meanings select").evaluate_all(
        "all => all.filter(one => !one.value).length"
    )
    if heading(page) != name or not open_rows:
        return
    for row in page.locator("table.meanings tbody tr").all():
        box = row.locator("select")
        if box.count() and not box.input_value():
            wording = WORDINGS[row.locator("input[name^=wording]").input_value()]
            choose(page, f"select[name='{box.get_attribute('name')}']", f"[value='{wording}']")
    press(page, "Tab")
    tab_to(page, "button[data-key=s]")
    after(page, lambda: press(page, "Enter"))


def test_the_same_with_the_keyboard_alone(visit: Any, site: Any) -> None:
    page: Page = visit("/desk")
    tab_to(page, "#title")
    for words in ("Holmby ward, heart sheet", "holmby-keys"):
        page.keyboard.type(words)
        press(page, "Tab")
    assert page.evaluate("document.activeElement.type") == "file"
    page.wait_for_load_state("networkidle")  # a browser that is still busy opens no file dialogue
    with page.expect_file_chooser(timeout=90_000) as chooser:
        press(page, "Space")
    chooser.value.set_files(FORM)
    tab_to(page, "#address")
    page.keyboard.type("https://holmby.example")
    press(page, "Tab")
    page.keyboard.type("Europe/Vienna")
    press(page, "Enter")
    expect(page.locator("#chosen")).to_be_focused()
    for name in MEANT:
        expect(page.locator("#chosen")).to_have_text(name)
        expect(page.locator("#chosen")).to_be_focused()
        map_by_keys(page, name)
        settle_by_keys(page, name)
    assert page.locator(".key").first.inner_text().split()[:5] == ["38", "mapped", "2", "ignored", "0"]
    tab_to(page, ".way a[href$='/publish']")
    press(page, "Enter")
    page.wait_for_url("**/publish")
    tab_to(page, "#author")
    page.keyboard.type("R. Example")
    press(page, "Tab")
    page.keyboard.type("By the keyboard")
    press(page, "Enter")
    expect(page.locator("main")).to_contain_text("Version 1 is in use")
    row = {**rows()[2], "form_serial": "S-7001"}
    assert post(site.address, "holmby-keys", row)["outcome"]["issue"][0]["severity"] == "information"
