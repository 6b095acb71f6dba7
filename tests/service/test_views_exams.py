"""The clinician's pages: found, read, considered, answered; and what is never said or done there."""

from __future__ import annotations

import re
from collections.abc import Callable
from html import unescape
from pathlib import Path
from typing import Any

import httpx
import pytest
from defusedxml import ElementTree
from fastapi import FastAPI
from sqlalchemy import create_engine, text
from starlette.testclient import TestClient

from fhirgallop.codes import fhirjson
from fhirgallop.storage.keys import patient_key

WHOSE = ("https://fernwood.example/patients", "F-20417")


@pytest.fixture
def post(client: TestClient, example: Callable[..., dict[str, Any]]) -> Callable[..., str]:
    """Sends the example examination with boxes changed; the address of its page."""

    def send(**groups: dict[str, Any]) -> str:
        record = example(**groups)
        answer = client.post("/exams", params={"map": "fernwood-heart-form"}, json=record)
        assert answer.status_code == 200, answer.text
        listed = client.get("/exams", params={"number": record["exam"]["number"]})
        found = re.findall(r'href="(/exams/[0-9a-f-]{36})"', listed.text)
        assert len(found) == 1
        return str(found[0])

    return send


@pytest.fixture
def charted(client: TestClient, root: Path) -> Callable[..., httpx.Response]:
    """The page of an examination held against one of the example charts."""

    def hand_in(address: str, name: str) -> httpx.Response:
        chart = (root / f"examples/clinician/{name}.chart.json").read_bytes()
        return client.post(f"{address}/chart", files={"chart": ("chart.json", chart, "application/json")})

    return hand_in


def _plain(page: str) -> str:
    """The words of a page on one line."""
    return " ".join(unescape(re.sub(r"<[^>]*>", " ", page)).split())


def test_found_by_patient_and_by_number_with_and_without_system(
    client: TestClient, post: Callable[..., str]
) -> None:
    address = post()
    for asked in (
        {"patient": "F-20417"},
        {"patient": "|".join(WHOSE)},
        {"number": "E-2026-0314-07"},
        {"number": "https://fernwood.example/examinations|E-2026-0314-07"},
        {"patient": "F-20417", "number": "E-2026-0314-07"},
    ):
        assert address in client.get("/exams", params=asked).text, asked
    for asked in ({"patient": "F-20418"}, {"patient": "urn:x|F-20417"}, {"number": "E-1"}):
        page = client.get("/exams", params=asked).text
        assert address not in page
        assert "Nothing is kept under that." in page


def test_the_list_goes_on_after_twenty_five_and_names_each_once(
    client: TestClient, example: Callable[..., dict[str, Any]]
) -> None:
    for number in range(30):
        record = example(exam={"number": f"E-{number}"}, heart={"s4": "no"})
        assert client.post("/exams?map=fernwood-heart-form&review=none", json=record).status_code == 200
    seen: list[str] = []
    address = "/exams"
    while address:
        page = client.get(address).text
        seen += re.findall(r">(E-\d+)<", page)
        further = re.search(r'href="(/exams\?[^"]*before[^"]*)"', page)
        address = unescape(further[1]) if further else ""
    assert seen == [f"E-{number}" for number in reversed(range(30))]


def test_each_kind_of_saying_is_shown_in_words_and_apart(
    client: TestClient, post: Callable[..., str]
) -> None:
    page = client.get(post()).text
    for kind, label, words in (
        ("present", "Fourth heart sound", "present"),
        ("absent", "Jaundice", "absent"),
        ("not-examined", "Oxygen saturation", "not examined"),
    ):
        assert re.search(rf'<div class="line {kind}">\s*<dt>{label}</dt>\s*<dd>{words}', page), label
    words = _plain(page)
    for said in ("152 mmHg", "60 to 65 % 2026-03-12", "Best heard leaning forward.",
                 "Examined in a quiet room.", "map fernwood-heart-form, version 2026.1", "S-31"):  # fmt: skip
        assert said in words
    assert "Opening snap absent" not in words  # nobody said anything of it


def test_without_a_chart_the_page_says_that_it_is_unknown(
    client: TestClient, post: Callable[..., str]
) -> None:
    words = _plain(client.get(post()).text)
    assert "held against itself only" in words
    assert "That nothing is shown is no reassurance." in words


def test_behind_a_card_stand_its_grounds_with_source_age_and_literature(
    post: Callable[..., str], charted: Callable[..., httpx.Response]
) -> None:
    page = charted(post(), "atrial-fibrillation-today")
    assert page.status_code == 200
    words = _plain(page.text)
    assert "Entries that need the atria to contract" in words
    assert "Cardiac rhythm: Atrial fibrillation [ECG, 20 minutes before, Observation/ecg-today]" in words
    assert "McGee, Evidence-Based Physical Diagnosis" in words
    assert "Fourth heart sound: listen again: bell at the apex, left lateral position" in words
    assert re.search(r'<li class="basis open">\s*<p><strong class="stands">not known', page.text)
    assert "What cannot all hold" in words
    assert "/knowledge/s4.in-atrial-fibrillation" in page.text
    assert "no P wave" in page.text  # the drawing takes the rhythm from the chart


def test_an_urgent_card_names_entries_alone(
    post: Callable[..., str], charted: Callable[..., httpx.Response]
) -> None:
    page = charted(post(), "urgent-combination").text
    card = page[page.index('<article class="card urgent"') :].partition("</article>")[0]
    assert "urgent clinical review" in card
    assert "/knowledge/" not in card
    assert "grounds" not in card
    assert card.count('name="answer"') == 1


def test_a_chart_of_another_patient_is_not_used(client: TestClient, post: Callable[..., str]) -> None:
    chart = {"resourceType": "Bundle", "type": "collection", "entry": [{"resource": {
        "resourceType": "Observation", "status": "final", "subject": {"reference": "Patient/other"},
        "code": {"text": "x"}}}]}  # fmt: skip
    page = client.post(
        f"{post()}/chart", files={"chart": ("c.json", fhirjson.write(chart), "application/json")}
    )
    assert page.status_code == 200
    assert "another patient" in _plain(page.text)


@pytest.mark.parametrize("content", [b"", b"{", b'"x"', b"[" * 5000], ids=range(4))
def test_what_is_no_chart_is_said_on_the_page(
    client: TestClient, post: Callable[..., str], content: bytes
) -> None:
    page = client.post(f"{post()}/chart", files={"chart": ("c.json", content, "application/json")})
    assert page.status_code == 422
    assert "Examination of 2026-03-14 09:30 +01:00" in page.text


def _form(page: str, answer: str, reason: str) -> tuple[str, dict[str, str]]:
    form = re.search(r'<form class="answer" method="post" action="([^"]+)".*?name="card" value="([^"]+)"',
                     page, re.DOTALL)  # fmt: skip
    assert form
    return unescape(form[1]), {"card": unescape(form[2]), "answer": answer, "reason": reason}


def test_an_answer_is_kept_shown_and_counted_like_that_of_a_client(
    client: TestClient, post: Callable[..., str], charted: Callable[..., httpx.Response]
) -> None:
    address = post()
    page = charted(address, "atrial-fibrillation-today").text
    where, form = _form(page, "true-in-this-patient", "Heard again <by two>")
    answer = client.post(where, data=form, follow_redirects=False)
    assert answer.status_code == 303
    assert answer.headers["location"].startswith(f"{address}#card-")
    again = charted(address, "atrial-fibrillation-today").text
    assert "This is how this patient is</strong>: “Heard again &lt;by two&gt;”" in again
    counted = {one["rule"]: one for one in client.get("/cds-feedback").json()["rules"]}
    assert counted["s4.in-atrial-fibrillation"]["true-in-this-patient"] == 1
    rule = _plain(client.get("/knowledge/s4.in-atrial-fibrillation").text)
    assert "1 × This is how this patient is" in rule


def test_a_script_gets_the_answer_alone(
    client: TestClient, post: Callable[..., str], charted: Callable[..., httpx.Response]
) -> None:
    page = charted(post(), "atrial-fibrillation-today").text
    where, form = _form(page, "looked-again", "")
    part = client.post(where, data=form, headers={"HX-Request": "true"})
    assert part.status_code == 200
    assert "<html" not in part.text
    assert "Seen: I looked or listened again" in part.text


def test_what_a_card_does_not_offer_is_refused(
    client: TestClient, post: Callable[..., str], charted: Callable[..., httpx.Response]
) -> None:
    urgent = charted(post(), "urgent-combination").text
    where, form = _form(urgent, "true-in-this-patient", "")
    assert client.post(where, data=form).status_code == 422
    for card in ("", "{", '{"rules": ["no.such-rule"]}', form["card"].replace('"key":"', '"key":"x')):
        given = {**form, "answer": "looked-again", "card": card}
        assert client.post(where, data=given).status_code == 422, card
    assert client.get("/cds-feedback").json() == {"rules": [], "unmatched": 0}


def test_versions_stand_beside_each_other(client: TestClient, post: Callable[..., str]) -> None:
    address = post()
    assert post(heart={"s4": "no"}, exam={"state": "changed"}) == address
    page = client.get(address).text
    assert re.search(r'<div class="line absent">\s*<dt>Fourth heart sound</dt>', page)
    older = re.search(rf'href="({address}\?version=\d+)">1, R4', page)
    assert older
    before = client.get(older[1]).text
    assert "This is an earlier version." in before
    assert re.search(r'<div class="line present">\s*<dt>Fourth heart sound</dt>', before)


def test_what_was_taken_back_is_said_to_be(
    client: TestClient, example: Callable[..., dict[str, Any]], post: Callable[..., str]
) -> None:
    address = post()
    record = example(exam={"state": "changed"})
    del record["apex"]
    assert client.post("/exams?map=fernwood-heart-form", json=record).status_code == 200
    words = _plain(client.get(address).text)
    assert "Taken back by the sender: Apex beat" in words


def test_what_a_clinician_wrote_is_shown_whole(client: TestClient, post: Callable[..., str]) -> None:
    words = "A long remark of many words. " * 60
    page = _plain(client.get(post(heart={"words": words}, general={"remark": words})).text)
    assert page.count(words.strip()) == 2


def test_the_drawing_has_an_address(client: TestClient, post: Callable[..., str]) -> None:
    answer = client.get(f"{post()}/heart-cycle.svg")
    assert answer.headers["content-type"] == "image/svg+xml"
    root = ElementTree.fromstring(answer.content)
    assert "S4 (left-sided)" in [node.text for node in root.iter("{http://www.w3.org/2000/svg}text")]


@pytest.mark.parametrize("path", ["x", "00000000-0000-4000-8000-000000000000", "x/heart-cycle.svg"])
def test_what_is_not_there_is_a_page_that_says_so(client: TestClient, path: str) -> None:
    answer = client.get(f"/exams/{path}", headers={"Accept": "text/html"})
    assert answer.status_code == 404
    assert "There is no such examination here" in answer.text


def test_a_row_of_another_examination_is_not_shown(client: TestClient, post: Callable[..., str]) -> None:
    first, second = post(), post(exam={"number": "E-2"})
    rows = {int(row) for row in re.findall(r"version=(\d+)", client.get(second).text)}
    assert rows
    assert client.get(f"{first}?version={rows.pop()}").status_code == 404


def test_everything_that_a_sender_wrote_is_escaped(client: TestClient, post: Callable[..., str]) -> None:
    mark = "<script>x</script>"
    page = client.get(post(heart={"words": mark}, general={"remark": mark})).text
    assert mark not in page
    assert page.count("&lt;script&gt;x&lt;/script&gt;") >= 2


def test_looking_is_in_the_audit_trail(
    client: TestClient, application: FastAPI, post: Callable[..., str]
) -> None:
    address = post()
    client.get(address)
    engine = create_engine(application.state.settings.database)
    with engine.connect() as connection:
        rows = connection.execute(text("SELECT patient, event FROM audit ORDER BY id")).all()
    engine.dispose()
    events = [(row.patient, fhirjson.read(row.event)[0]) for row in rows]
    digest = patient_key(*WHOSE)
    assert [patient for patient, _ in events] == [digest] * 3  # kept, listed, read
    assert [event["action"] for _, event in events][1:] == ["R", "R"]
    assert "urn:uuid:" + address.rpartition("/")[2] in str(events[-1][1])


def test_pages_load_nothing_from_elsewhere_and_stay_small(
    client: TestClient, post: Callable[..., str]
) -> None:
    for address in ("/", "/exams", post(), "/knowledge", "/deliveries"):
        answer = client.get(address)
        assert "default-src 'none'" in answer.headers["content-security-policy"]
        outside = re.findall(r'(?:src|href|action)="(?!/|#|data:,)[^"]*"', answer.text)
        assert outside == [], address
        assert " style=" not in answer.text
        assert len(answer.content) < 100_000, address
