"""POST /exams: shapes of the answer, repetition and change, batches, content negotiation."""

from __future__ import annotations

import gzip
import json
from pathlib import Path
from typing import Any

import pytest

WHERE = "/exams?map=fernwood-heart-form"
FHIR = {"Accept": "application/fhir+json"}


def statuses(bundle: dict[str, Any], kind: str) -> dict[str, str]:
    """Title of a resource -> its status."""
    resources = [entry["resource"] for entry in bundle["entry"]]
    return {r["code"]["text"]: r["status"] for r in resources if r["resourceType"] == kind}


def rules(told: dict[str, Any]) -> list[str]:
    """Rules of the issues in an answer."""
    issues = told.get("outcome", told)["issue"]
    return [i["details"]["coding"][0]["code"] for i in issues if "coding" in i["details"]]


def test_one_record_is_answered_with_bundle_outcome_and_what_was_left(client: Any, example: Any) -> None:
    answer = client.post(WHERE, json={**example(), "shoe": "43"})
    assert answer.status_code == 200
    assert answer.headers["content-type"] == "application/json"
    told = answer.json()
    assert list(told) == ["bundle", "outcome", "review", "unread", "unknown"]
    assert (told["bundle"]["resourceType"], told["bundle"]["type"]) == ("Bundle", "transaction")
    assert told["unread"] == ["shoe"]
    assert [i["severity"] for i in told["outcome"]["issue"]] == ["warning"]


def test_the_bare_bundle_for_who_asks_for_fhir(client: Any, example: Any) -> None:
    told = client.post(WHERE, json={**example(), "shoe": "43"}).json()
    bare = client.post(WHERE, json={**example(), "shoe": "43"}, headers=FHIR)
    assert bare.headers["content-type"] == "application/fhir+json"
    assert bare.headers["fhirgallop-issues"] == "1"
    assert bare.json() == told["bundle"]


@pytest.mark.parametrize(
    ("accept", "status", "kind"),
    [
        ("*/*", 200, "application/json"),
        ("application/json", 200, "application/json"),
        ("application/*;q=0.8", 200, "application/json"),
        ("application/json;q=0.5, application/fhir+json", 200, "application/fhir+json"),
        ("application/fhir+json;q=0.1, application/json;q=0.2", 200, "application/json"),
        ("application/fhir+json;q=0, */*;q=0.1", 200, "application/json"),
        ("text/html, application/xhtml+xml, */*;q=0.8", 200, "application/json"),
        ("application/fhir+xml", 406, "application/fhir+json"),
        ("application/json;q=0", 406, "application/fhir+json"),
    ],
)
def test_accept(client: Any, example: Any, accept: str, status: int, kind: str) -> None:
    """RFC 9110, 12.5.1; FHIR R4 REST "Content types": 406 where nothing acceptable can be answered."""
    answer = client.post(WHERE, json=example(), headers={"Accept": accept})
    assert (answer.status_code, answer.headers["content-type"]) == (status, kind)


def test_the_same_examination_twice_gives_the_same_bytes(client: Any, example: Any) -> None:
    first = client.post(WHERE, json=example(), headers=FHIR).content
    assert client.post(WHERE, json=example(), headers=FHIR).content == first


def test_the_form_it_comes_in_makes_no_other_examination(client: Any, example: Any, root: Path) -> None:
    first = client.post(WHERE, json=example(), headers=FHIR).content
    message = (root / "examples/ehr/fernwood-exam.hl7").read_bytes()
    again = client.post(WHERE, content=message, headers={**FHIR, "Content-Type": "x-application/hl7-v2+er7"})
    assert again.content == first


def test_a_changed_examination_amends_and_a_withdrawn_entry_is_entered_in_error(
    client: Any, example: Any
) -> None:
    first = client.post(WHERE, json=example()).json()["bundle"]
    changed = client.post(WHERE, json=example(heart={"s4": "no", "s3": None, "done": None})).json()["bundle"]
    before, after = statuses(first, "Observation"), statuses(changed, "Observation")
    assert before["Fourth heart sound"] == before["Third heart sound"] == "final"
    assert after["Third heart sound"] == "entered-in-error"
    assert after["Heart rate"] == "final"
    ids = {e["fullUrl"] for e in first["entry"] if e["resource"]["resourceType"] == "Observation"}
    assert ids <= {e["fullUrl"] for e in changed["entry"]}, "the same resources are updated"


def test_back_to_the_first_state_is_a_change_again(client: Any, example: Any) -> None:
    client.post(WHERE, json=example())
    client.post(WHERE, json=example(vitals={"hr": 80}))
    third = client.post(WHERE, json=example()).json()
    assert statuses(third["bundle"], "Observation")["Heart rate"] in ("amended", "corrected")
    assert rules(third) == ["exam-earlier-content-again"]
    fourth = client.post(WHERE, json=example(vitals={"hr": 81})).json()
    assert rules(fourth) == []


def test_a_packed_body_is_refused_by_name(client: Any, example: Any) -> None:
    packed = gzip.compress(json.dumps(example()).encode())
    headers = {"Content-Type": "application/json", "Content-Encoding": "gzip"}
    answer = client.post(WHERE, content=packed, headers=headers)
    assert answer.status_code == 415
    assert rules(answer.json()) == ["http-content-encoding"]


def test_a_late_draft_does_not_take_the_place_of_a_signed_examination(client: Any, example: Any) -> None:
    draft = client.post(WHERE, json=example(exam={"state": "draft"})).json()
    assert set(statuses(draft["bundle"], "Observation").values()) == {"preliminary"}
    signed = client.post(WHERE, json=example(), headers=FHIR).content
    late = client.post(WHERE, json=example(exam={"state": "draft"}, vitals={"hr": 80}))
    assert late.status_code == 422
    assert rules(late.json()) == ["exam-draft-after-signed"]
    assert client.post(WHERE, json=example(), headers=FHIR).content == signed


def test_another_edition_is_no_change_of_the_examination(client: Any, example: Any) -> None:
    client.post(WHERE, json=example())
    for more in ("&edition=R5", "&edition=R4B", "&snomed=false"):
        bundle = client.post(WHERE + more, json=example()).json()["bundle"]
        assert set(statuses(bundle, "Observation").values()) == {"final"}, more


def test_without_snomed_no_snomed_code_is_written(client: Any, example: Any) -> None:
    assert "http://snomed.info/sct" in client.post(WHERE, json=example(), headers=FHIR).text
    assert (
        "http://snomed.info/sct"
        not in client.post(WHERE + "&snomed=false", json=example(), headers=FHIR).text
    )


def test_a_list_is_answered_in_order_and_the_good_ones_come_out(client: Any, example: Any) -> None:
    records = [
        example(exam={"number": "A"}),
        example(exam={"number": "B"}, heart={"s4": "thundering"}),
        "no record",
        example(exam={"number": "C"}),
    ]
    told = client.post(WHERE, json=records).json()
    assert (told["coded"], told["refused"]) == (2, 2)
    assert [r["status"] for r in told["results"]] == ["coded", "refused", "unreadable", "coded"]
    assert ["bundle" in r for r in told["results"]] == [True, False, False, True]
    assert told["results"][1]["unknown"] == [{"field": "heart.s4", "value": "thundering"}]
    assert "[2]" in json.dumps(told["results"][2]["outcome"])


def test_who_sends_a_list_gets_a_list_also_for_one(client: Any, example: Any) -> None:
    told = client.post(WHERE, json=[example()]).json()
    assert [r["status"] for r in told["results"]] == ["coded"]


def test_forms_in_a_list_are_read_as_forms(client: Any, root: Path) -> None:
    form = json.loads((root / "examples/ehr/fernwood-exam.questionnaireresponse.json").read_bytes())
    told = client.post(WHERE, json=[form, form]).json()
    assert [r["status"] for r in told["results"]] == ["coded", "coded"]
    assert told["results"][0]["bundle"] == told["results"][1]["bundle"]


def test_several_have_no_bare_bundle(client: Any, example: Any) -> None:
    assert client.post(WHERE, json=[example()], headers=FHIR).status_code == 406


def test_too_many_at_once_are_refused_and_none_is_kept(client: Any, example: Any) -> None:
    line = json.dumps(example()).encode() + b"\n"
    many = client.post(WHERE, content=line * 51, headers={"Content-Type": "application/x-ndjson"})
    assert (many.status_code, many.json()["issue"][0]["code"]) == (413, "too-long")
    few = client.post(WHERE, content=line * 50, headers={"Content-Type": "application/x-ndjson"})
    assert (few.status_code, few.json()["coded"]) == (200, 50)


def test_numbers_keep_their_digits(client: Any, example: Any) -> None:
    body = json.dumps(example()).replace('"weight": 81.5', '"weight": 81.50')
    answer = client.post(WHERE, content=body, headers={"Content-Type": "application/json", **FHIR})
    assert '"value":81.50' in answer.text


@pytest.mark.parametrize("edition", ["R4", "R4B", "R5"])
def test_editions(client: Any, example: Any, edition: str) -> None:
    assert client.post(f"{WHERE}&edition={edition}", json=example()).status_code == 200


@pytest.mark.parametrize(
    ("query", "status", "rule"),
    [
        ("", 400, "http-parameter"),
        ("?map=", 404, "http-unknown-map"),
        ("?map=../../etc/passwd", 404, "http-unknown-map"),
        ("?map=fernwood-heart-form&edition=R3", 400, "http-parameter"),
        ("?map=fernwood-heart-form&snomed=perhaps", 400, "http-parameter"),
        ("?map=fernwood-heart-form&editon=R5", 400, "http-unknown-parameter"),
    ],
)
def test_parameters(client: Any, example: Any, query: str, status: int, rule: str) -> None:
    answer = client.post(f"/exams{query}", json=example())
    assert answer.status_code == status
    assert answer.headers["content-type"] == "application/fhir+json"
    assert answer.json()["issue"][0]["details"]["coding"][0]["code"] == rule
