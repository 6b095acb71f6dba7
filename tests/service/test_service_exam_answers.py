"""What POST /exams answers beside the Bundle: the review, with or without a chart; an HL7 acknowledgement."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.service.app import create_app

WHERE = "/exams?map=fernwood-heart-form"
HL7 = "application/hl7-v2"


@pytest.fixture
def chart(root: Path) -> bytes:
    return (root / "examples/clinician/atrial-fibrillation-today.chart.json").read_bytes()


@pytest.fixture
def message(root: Path) -> str:
    return (root / "examples/ehr/fernwood-exam.hl7").read_text("utf-8").replace("\n", "\r")


def form(record: dict[str, Any] | bytes, chart: bytes, kind: str = "application/json") -> dict[str, Any]:
    text = record if isinstance(record, bytes) else json.dumps(record).encode()
    return {"record": ("r", text, kind), "chart": ("c", chart, "application/fhir+json")}


def rules(answer: Any) -> list[str]:
    issues = answer.json().get("outcome", answer.json())["issue"]
    return [issue["details"]["coding"][0]["code"] for issue in issues if "coding" in issue["details"]]


def test_an_examination_by_itself_is_reviewed_and_silence_is_called_no_reassurance(
    client: Any, example: Any
) -> None:
    review = client.post(WHERE, json=example()).json()["review"]
    assert (review["cards"], review["folded"], review["limits"]) == ([], [], [])
    said = " ".join(review["notices"])
    assert "No chart was sent along" in said
    assert "no reassurance" in said
    assert any("does not replace it" in text for text in review["safety"])
    assert "conclusions" not in review


def test_the_review_without_a_chart_is_of_this_examination(client: Any, example: Any) -> None:
    said = []
    for sound in ("left", "no"):
        record = example(heart={"s4": sound})
        full = client.post(f"{WHERE}&review=full", json=record).json()["review"]["conclusions"]
        said.append("heart-sound.s4" in {item["id"] for one in full["open"] for item in one["subject"]})
    assert said == [True, False]


def test_the_full_review_holds_what_no_card_shows(client: Any, example: Any) -> None:
    full = client.post(f"{WHERE}&review=full", json=example()).json()["review"]
    assert full["conclusions"]["open"]
    assert full["conclusions"]["rules_version"] == full["rules_version"]


def test_with_the_chart_the_fourth_sound_is_asked_about(client: Any, example: Any, chart: bytes) -> None:
    """The clinician's example: a fourth heart sound, and atrial fibrillation in the chart of today."""
    answer = client.post(WHERE, files=form(example(), chart))
    assert answer.status_code == 200, answer.text
    review = answer.json()["review"]
    assert [card["level"] for card in review["cards"]] == ["interruptive"]
    assert "s4.in-atrial-fibrillation" in json.dumps(review["cards"][0])
    assert "against the chart that was sent along" in review["notices"][0]
    assert client.post(WHERE, json=example()).json()["review"]["cards"] == []


def test_every_form_can_be_reviewed_against_a_chart(client: Any, chart: bytes, message: str) -> None:
    review = client.post(WHERE, files=form(message.encode(), chart, HL7)).json()["review"]
    assert "s4.in-atrial-fibrillation" in json.dumps(review["cards"])


def test_the_ending_of_a_file_says_its_form_where_nothing_else_does(
    client: Any, chart: bytes, message: str, example: Any
) -> None:
    """What common clients send for a file whose type they do not know."""
    for name, text in (("exam.hl7", message.encode()), ("exam.json", json.dumps(example()).encode())):
        files = {"record": (name, text, "application/octet-stream"), "chart": ("c", chart)}
        assert client.post(WHERE, files=files).status_code == 200, name
    files = {"record": ("exam.png", b"\x89PNG", "image/png"), "chart": ("c", chart)}
    assert client.post(WHERE, files=files).status_code == 415


def test_limits_travel_with_the_review(client: Any, example: Any, chart: bytes) -> None:
    """A child's examination: most rules are not meant for it, and that is said."""
    bundle = json.loads(chart)
    for entry in bundle["entry"]:
        if entry["resource"]["resourceType"] == "Patient":
            entry["resource"]["birthDate"] = "2019-02-01"
    review = client.post(WHERE, files=form(example(), json.dumps(bundle).encode())).json()["review"]
    assert review["limits"]
    assert "year" in review["limits"][0]


def test_what_of_the_chart_could_not_be_read_is_said(client: Any, example: Any, chart: bytes) -> None:
    bundle = json.loads(chart)
    bundle["entry"].append({"resource": {"resourceType": "Observation", "status": "final"}})
    review = client.post(WHERE, files=form(example(), json.dumps(bundle).encode())).json()["review"]
    assert review["left_out_of_chart"]


def test_the_review_can_be_left_out(client: Any, example: Any) -> None:
    assert "review" not in client.post(f"{WHERE}&review=none", json=example()).json()
    assert client.post(f"{WHERE}&review=loud", json=example()).status_code == 400


def test_several_are_reviewed_only_when_asked(client: Any, example: Any) -> None:
    plain = client.post(WHERE, json=[example()]).json()["results"][0]
    asked = client.post(f"{WHERE}&review=short", json=[example()]).json()["results"][0]
    assert "review" not in plain
    assert asked["review"]["notices"]


def test_what_is_refused_has_no_review(client: Any, example: Any) -> None:
    told = client.post(f"{WHERE}&review=short", json=[example(heart={"s4": "thundering"})]).json()
    assert "review" not in told["results"][0]


def test_in_shadow_mode_nothing_is_shown(root: Path, tmp_path: Path, example: Any, chart: bytes) -> None:
    chosen = settings.load(
        maps=root / "examples/informatician",
        database=f"sqlite:///{tmp_path / 's.sqlite3'}",
        cards_shadow=True,
    )
    with TestClient(create_app(chosen), base_url="http://localhost") as client:
        review = client.post(f"{WHERE}&review=full", files=form(example(), chart)).json()["review"]
    assert (review["cards"], review["folded"], review["ask"]) == ([], [], None)
    assert "conclusions" not in review
    assert any("unseen" in notice for notice in review["notices"])


@pytest.mark.parametrize(
    ("files", "status", "rule"),
    [
        ({"record": ("r", b"{}", "application/json")}, 400, "http-form"),
        ({"chart": ("c", b"{}", "application/json")}, 400, "http-form"),
        ({"record": ("r", b"{}"), "chart": ("c", b"{}"), "more": ("m", b"")}, 400, "http-form"),
        ({"record": ("r", b"x", "image/png"), "chart": ("c", b"{}")}, 415, "http-content-type"),
        ({"record": ("r", b"{}", "application/json"), "chart": ("c", b"not json")}, 400, "json-syntax"),
        ({"record": ("r", b"{}", "application/json"), "chart": ("c", b"7")}, 400, "http-chart"),
        ({"record": ("r", b"[{},{}]", "application/json"), "chart": ("c", b"{}")}, 400, "http-chart-several"),
    ],
)
def test_a_form_that_is_not_as_it_should_be(client: Any, files: Any, status: int, rule: str) -> None:
    answer = client.post(WHERE, files=files)
    assert (answer.status_code, rules(answer)[0]) == (status, rule)


@pytest.mark.parametrize(
    ("kind", "body"),
    [
        ("multipart/form-data", b"--x\r\n\r\n"),
        ("multipart/form-data; boundary=x", b""),
        ("multipart/form-data; boundary=x", b"--x\r\nContent-Disposition: form-data; name=record\r\n\r\n{}"),
        ("multipart/form-data; boundary=x", b"\x00\xff" * 50),
        ("multipart/form-data; boundary=" + "x" * 71, b"--x--"),
        ("multipart/form-data; boundary=x", b"--x\r\nA: " + b"a" * 2000 + b"\r\n\r\n{}\r\n--x--"),
        ("multipart/form-data; boundary=x", b"--x\r\n" + b"A: a\r\n" * 99 + b"\r\n{}\r\n--x--"),
        ("multipart/form-data; boundary=x", b"--x\r\n\r\n{}\r\n" * 9 + b"--x--"),
    ],
)
def test_a_broken_form_is_refused(client: Any, kind: str, body: bytes) -> None:
    """RFC 2046, 5.1.1: a boundary has at most 70 characters, and the last one ends in two hyphens."""
    answer = client.post(WHERE, content=body, headers={"Content-Type": kind})
    assert (answer.status_code, rules(answer)) == (400, ["http-form"])


def acknowledged(client: Any, text: str, accept: str = HL7, **headers: str) -> tuple[Any, list[str]]:
    sent = {"Content-Type": HL7, "Accept": accept, **headers}
    answer = client.post(WHERE, content=text.encode(), headers=sent)
    return answer, answer.content.decode().split("\r")


def test_v2_19_a_message_that_is_taken_is_acknowledged(client: Any, message: str) -> None:
    """HL7 v2.8.2, 2.9.2: MSA-1 AA, MSA-2 the MSH-10 of the message, sender and receiver changed round."""
    answer, lines = acknowledged(client, message)
    assert (answer.status_code, answer.headers["content-type"]) == (200, HL7)
    theirs, ours = message.split("\r", maxsplit=1)[0].split("|"), lines[0].split("|")
    assert lines[1].split("|")[:3] == ["MSA", "AA", theirs[9]]
    assert ours[8] == "ACK^R01^ACK"
    assert (ours[2], ours[3], ours[4], ours[5]) == (theirs[4], theirs[5], theirs[2], theirs[3])
    assert 0 < len(ours[9]) <= 20
    kept = client.post(WHERE, content=message.encode(), headers={"Content-Type": HL7}).json()
    assert kept["bundle"]["resourceType"] == "Bundle"


def test_v2_19_what_is_wrong_in_the_data_is_an_ae_with_err(client: Any, message: str) -> None:
    wrong = message.replace("|20260314093000+0100|", "|2026-03-14|", 1)
    assert wrong != message
    answer, lines = acknowledged(client, wrong)
    assert answer.status_code == 200
    assert lines[1].startswith("MSA|AE|")
    assert any(line.startswith("ERR|") and "|E|" in line for line in lines)


def test_v2_19_what_is_no_message_is_an_ar(client: Any) -> None:
    answer, lines = acknowledged(client, "MSH|^~\\&|A|B|C|D|20260314||ADT^A01|7|P|2.5.1\rPID|1\r")
    assert (answer.status_code, lines[1]) == (200, "MSA|AR|7")
    _, nothing = acknowledged(client, "hello")
    assert nothing[1].startswith("MSA|AR|")


def test_an_acknowledgement_answers_only_messages_and_only_when_asked_for(
    client: Any, example: Any, message: str
) -> None:
    answer = client.post(WHERE, json=example(), headers={"Accept": HL7})
    assert (answer.status_code, rules(answer)) == (406, ["http-accept-hl7"])
    kind = "x-application/hl7-v2+er7"
    answer, _ = acknowledged(client, message, accept=f"{kind}, application/json;q=0.5")
    assert answer.headers["content-type"] == kind


def test_what_is_wrong_with_the_request_is_no_acknowledgement(client: Any, message: str) -> None:
    """Only what the message says is acknowledged: the rest is for another try, or for the sender to mend."""
    headers = {"Content-Type": HL7, "Accept": HL7}
    unknown = client.post("/exams?map=nothing", content=message.encode(), headers=headers)
    assert (unknown.status_code, unknown.headers["content-type"]) == (404, "application/fhir+json")


def test_a_message_taken_in_part_says_so(client: Any, message: str) -> None:
    """Two examinations in one message, of which the second cannot be coded."""
    lines = message.rstrip("\r").split("\r")
    order = next(n for n, line in enumerate(lines) if line.startswith("OBR"))
    second = [line.replace("E-2026-0314-07", "E-2") for line in lines[order:]]
    second = [line.replace("left^left", "thundering^thundering") for line in second]
    _, answer = acknowledged(client, "\r".join([*lines, *second]) + "\r")
    assert answer[1].startswith("MSA|AE|")
    assert any("hl7-taken-in-part" in line for line in answer)
    _, whole = acknowledged(client, message)
    assert whole[1].startswith("MSA|AA|")
