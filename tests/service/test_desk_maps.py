"""The desk behind its pages: forms brought in, drafts changed, maps published, put back, given out."""

from __future__ import annotations

import io
import json
import re
from html import unescape
from pathlib import Path
from typing import Any

import openpyxl
import pytest
from ruamel.yaml import YAML

from fhirgallop.codes import fhirjson
from fhirgallop.conformance.validator import validate
from fhirgallop.service.desk.dictionary import read_dictionary
from fhirgallop.service.shelf import Shelf
from fhirgallop.storage.publications import Publications

HTML = {"Accept": "text/html"}
SAMPLE = b"id;nr;when;s4\n1;11;2026-11-03T08:00:00Z;ja\n2;12;2026-11-03T09:00:00Z;nein\n"
MAP = """\
template-map: 1
name: small
version: "1"
record:
  patient: {field: id, system: "https://a.example/p"}
  identifier: {field: nr, system: "https://a.example/e"}
  time: {field: when}
lines:
  - finding: heart-sound.s4
    field: s4
    choice: {ja: present, nein: absent}
"""


def read_yaml(written: str) -> Any:
    """Read by a library of its own, not by the desk's reader."""
    return YAML(typ="safe").load(written)


def begin(client: Any, *files: tuple[str, bytes], name: str = "small", to: str = "records") -> Any:
    told = {"name": name, "title": "Small form", "address": "https://a.example", "zone": "Europe/Vienna"}
    sent = [(to, (file, content)) for file, content in files]
    return client.post("/desk", data=told, files=sent, headers=HTML, follow_redirects=False)


def drafted(client: Any, *files: tuple[str, bytes], name: str = "small") -> str:
    answer = begin(client, *(files or (("a.csv", SAMPLE),)), name=name)
    assert answer.status_code == 303, answer.text
    return str(answer.headers["location"])


def step(client: Any, draft: str) -> str:
    found = re.search(r'name="step" value="(\d+)"', client.get(draft).text)
    assert found
    return found[1]


def change(client: Any, draft: str, **told: str) -> Any:
    return client.post(f"{draft}/change", data={"step": step(client, draft), **told}, headers=HTML)


def text(client: Any, draft: str) -> str:
    found = re.search(r"<textarea[^>]*>(.*?)</textarea>", client.get(f"{draft}?pane=text").text, re.DOTALL)
    assert found
    return unescape(found[1])


def publish(client: Any, draft: str, version: str = "1", **told: str) -> Any:
    now = {"step": step(client, draft), "version": version, "author": "R. Example", "note": "why", **told}
    return client.post(f"{draft}/publish", data=now, headers=HTML)


def in_use(client: Any, name: str = "small") -> str:
    answer = client.get(f"/maps/{name}")
    return str(answer.json()["version"]) if answer.status_code == 200 else ""


ORU = (
    "MSH|^~\\&|A|B|C|D|20261103080000+0100||ORU^R01^ORU_R01|1|P|2.5.1\r"
    "PID|1||77^^^A||X\rOBR|1|E-9||EXAM^Heart|||20261103080000+0100\rOBX|1|ST|S4^Fourth||present||||||F\r"
)
RESPONSE = {
    "resourceType": "QuestionnaireResponse", "status": "completed", "authored": "2026-11-03T08:00:00Z",
    "item": [{"linkId": "s4", "answer": [{"valueString": "present"}]}],
}  # fmt: skip


def workbook() -> bytes:
    book, out = openpyxl.Workbook(), io.BytesIO()
    for row in (("id", "s4"), ("1", "ja"), ("2", "nein")):
        book.active.append(row)
    book.save(out)
    return out.getvalue()


@pytest.mark.parametrize(
    ("file", "content", "field"),
    [
        ("a.json", json.dumps({"id": 1, "heart": {"s4": "yes"}}).encode(), "heart.s4"),
        ("a.ndjson", b'{"s4": "yes"}\n{"s4": "no"}\n', "s4"),
        ("a.csv", SAMPLE, "s4"),
        ("a.xlsx", workbook(), "s4"),
        ("a.hl7", ORU.encode(), "S4"),
        ("a.json", json.dumps(RESPONSE).encode(), "s4"),
    ],
    ids=["json", "ndjson", "csv", "workbook", "oru", "questionnaire-response"],
)
def test_every_kind_of_sample_shows_its_fields(client: Any, file: str, content: bytes, field: str) -> None:
    page = client.get(drafted(client, (file, content)) + "?show=all").text
    assert f'<span class="name">{field}</span>' in page


@pytest.mark.parametrize(
    "sample",
    [("a.hl7", ORU.encode()), ("a.json", json.dumps(RESPONSE).encode())],
    ids=["oru", "questionnaire-response"],
)
def test_a_form_with_a_header_needs_no_fields_for_it(client: Any, sample: tuple[str, bytes]) -> None:
    held = read_yaml(text(client, drafted(client, sample)))["record"]
    assert held["patient"] == {"system": "https://a.example/patients"}
    assert held["time"] == {"zone": "Europe/Vienna"}


def test_a_data_dictionary_alone_will_do(client: Any) -> None:
    table = b"name;label;values;unit\nq1;Fourth heart sound;1=yes|0=no;\nq2;Ejection fraction;;%\n"
    answer = begin(client, ("d.csv", table), to="dictionary")
    draft = answer.headers["location"]
    assert "Fourth heart sound" in client.get(draft).text
    change(client, draft, field="q1", do="offer", target="heart-sound.s4", side="")
    change(client, draft, field="q2", do="offer", target="echo.lvef", side="")
    first, second = read_yaml(text(client, draft))["lines"]
    assert first["choice"] == {"1": "present", "0": "absent"}
    assert second["number"] == {"unit": "%"}


def test_a_questionnaire_describes_a_form(root: Path) -> None:
    """FHIR R4 Questionnaire: linkId, text, answerOption, groups."""
    form = (root / "examples/ehr/fernwood-form.questionnaire.json").read_bytes()
    found, issues = read_dictionary(form, "application/fhir+json")
    assert issues == []
    assert len(found) > 10
    assert any(row.section and row.values for row in found)


def test_what_cannot_be_brought_in_is_said_on_the_page(client: Any) -> None:
    nothing = begin(client)
    assert nothing.status_code == 422
    assert "Choose a file" in nothing.text
    picture = begin(client, ("a.png", b"\x89PNG"))
    assert picture.status_code == 415
    assert picture.headers["content-type"].startswith("text/html")
    blanks = begin(client, ("a.csv", SAMPLE), name="with blanks")
    assert "without blanks" in blanks.text
    assert client.get("/desk/drafts/none", headers=HTML).status_code == 404


def test_a_line_of_text_is_tried_with_its_words_marked(client: Any) -> None:
    sample = b"id;nr;when;heart\n1;11;2026-11-03T08:00:00Z;S4, no S3, purple <b>\n"
    draft = drafted(client, ("a.csv", sample))
    lines = "lines:\n  - field: heart\n    words: {language: en}\n"
    change(client, draft, do="text", text=MAP[: MAP.index("lines:")] + lines)
    page = client.get(f"{draft}?pane=try").text
    assert "<u>S4</u>, <u>no S3</u>" in page
    assert "<i>[purple &lt;b&gt;]</i>" in page


def test_undo_and_redo_go_through_every_step(client: Any) -> None:
    draft = drafted(client)
    empty = text(client, draft)
    change(client, draft, field="s4", do="offer", target="heart-sound.s4", side="")
    full = text(client, draft)
    assert "heart-sound.s4" in full
    for way, wanted in (("", empty), ("forth", full), ("", empty)):
        client.post(f"{draft}/undo", data={"step": step(client, draft), "way": way})
        assert text(client, draft) == wanted
    change(client, draft, field="s4", do="ignore", reason="not yet")  # takes the place of what was undone
    client.post(f"{draft}/undo", data={"step": step(client, draft), "way": "forth"})
    assert "not yet" in text(client, draft)


def test_two_people_do_not_overwrite_each_other(client: Any) -> None:
    draft = drafted(client)
    change(client, draft, field="s4", do="ignore", reason="first")
    late = {"step": "0", "field": "s4", "do": "text", "text": "lines: []"}
    page = client.post(f"{draft}/change", data=late).text
    assert "Somebody else has changed this draft" in page
    assert "first" in text(client, draft)


@pytest.mark.parametrize("what", ["offer", "ignore", "remark"])
def test_what_is_taken_back_leaves_nothing(client: Any, what: str) -> None:
    draft = drafted(client)
    before = read_yaml(text(client, draft))
    told = {"target": "heart-sound.s4", "side": "", "reason": "x", "of": ""}
    change(client, draft, field="s4", do=what, **told)
    assert "s4" in text(client, draft)
    change(client, draft, field="s4", do="back")
    after = read_yaml(text(client, draft))
    assert not after.get("lines")
    assert not after.get("ignore")
    assert after["record"] == before["record"]


def test_date_and_time_in_two_fields_become_one_time(client: Any) -> None:
    draft = drafted(client, ("a.csv", b"day;clock\n03.11.2026;08:40\n04.11.2026;09:10\n"))
    for field in ("day", "clock"):
        change(client, draft, field=field, do="pick", target="record#time")
    time = read_yaml(text(client, draft))["record"]["time"]
    assert time == {"fields": ["day", "clock"], "format": "DD.MM.YYYY", "zone": "Europe/Vienna"}
    change(client, draft, field="clock", do="back")
    assert read_yaml(text(client, draft))["record"]["time"]["field"] == "day"


def test_published_used_replaced_and_put_back(client: Any) -> None:
    draft = drafted(client)
    assert in_use(client) == ""
    change(client, draft, do="text", text=MAP)
    assert publish(client, draft, samples="keep").status_code == 200
    assert in_use(client) == "1"
    record = {"id": "1", "nr": "99", "when": "2026-11-03T08:00:00Z", "s4": "ja"}
    assert client.post("/exams?map=small", json=record).status_code == 200
    changed = MAP.replace("ja: present", "ja: uncertain")
    change(client, draft, do="text", text=changed)
    taken = publish(client, draft)
    assert taken.status_code == 409
    assert "raise the version" in taken.text
    compared = client.get(f"{draft}/publish").text
    assert "of 2 sample records 1 come out otherwise" in " ".join(compared.split())
    assert 'name="version" value="2"' in compared
    publish(client, draft, "2")
    assert in_use(client) == "2"
    assert "0 of" not in client.get(draft).text.split("filled in")[0]
    back = {"version": "1", "author": "R. Example", "note": "too early"}
    client.post("/desk/maps/small/back", data=back)
    assert in_use(client) == "1"
    history = client.get("/desk/maps/small").text
    assert "put back" in history
    assert "too early" in history


def test_samples_go_when_the_map_is_published(client: Any) -> None:
    draft = drafted(client)
    change(client, draft, do="text", text=MAP)
    publish(client, draft)
    assert "There are no sample records" in client.get(draft).text


def test_a_map_with_faults_is_not_published(client: Any) -> None:
    draft = drafted(client)
    answer = publish(client, draft)
    assert answer.status_code == 422
    assert in_use(client) == ""


def test_what_is_published_is_on_every_shelf(client: Any, application: Any) -> None:
    """A second process sees it within a second; here, a second shelf with a clock of its own."""
    ticks = iter([0.0, 0.0, 0.5, 2.0, 2.0, 2.0, 2.0])
    other = Shelf({}, Publications(application.state.desk.drafts._engine), lambda: next(ticks))
    assert "small" not in other
    draft = drafted(client)
    change(client, draft, do="text", text=MAP)
    publish(client, draft)
    assert "small" not in other
    assert other["small"].version == "1"


def test_the_desk_counts_before_the_folder(client: Any) -> None:
    folder = in_use(client, "lindental-herzbogen")
    again = client.post("/desk/again", data={"name": "lindental-herzbogen"}, follow_redirects=False)
    draft = again.headers["location"]
    assert text(client, draft).startswith("# Zuordnung")
    publish(client, draft, f"{folder}.1")
    assert in_use(client, "lindental-herzbogen") == f"{folder}.1"
    assert "is left aside" in client.get("/desk/maps/lindental-herzbogen").text


@pytest.mark.parametrize("name", ["fernwood-heart-form", "lindental-herzbogen", "circor-2022"])
def test_downloads_are_what_they_say(client: Any, root: Path, name: str) -> None:
    version = in_use(client, name)
    base = f"/desk/maps/{name}/{version}"
    written = client.get(f"{base}/map.yaml")
    assert written.content == (root / f"examples/informatician/{name}.yaml").read_bytes()
    for kind, type_ in (("conceptmap", "ConceptMap"), ("questionnaire", "Questionnaire")):
        answer = client.get(f"{base}/{kind}.json")
        assert "attachment" in answer.headers["content-disposition"]
        resource, issues = fhirjson.read(answer.content)
        assert issues == []
        assert resource["resourceType"] == type_
        assert [str(issue) for issue in validate(resource, "R4") if issue.is_error] == []


def test_a_draft_can_be_deleted_with_its_samples(client: Any) -> None:
    draft = drafted(client)
    client.post(f"{draft}/delete", data={"sure": "yes"})
    assert client.get(draft, headers=HTML).status_code == 404
    assert draft not in client.get("/desk").text
