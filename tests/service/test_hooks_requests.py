"""CDS Hooks 2.0.1, what a client sends: each test is named after the requirement it holds."""

from __future__ import annotations

import json
import logging
import socket
from collections.abc import Callable
from typing import Any

import pytest
from starlette.testclient import TestClient

from fhirgallop.cards import today
from fhirgallop.codes import fhirjson
from fhirgallop.reasoning.review import review
from fhirgallop.storage.hooks import HookStore
from fhirgallop.storage.submissions import StorageError

Json = dict[str, Any]
Make = Callable[..., Json]
VIEW = "/cds-services/exam-review-patient-view"
DISCHARGE = "/cds-services/exam-review-encounter-discharge"
DRAFT = "/cds-services/exam-review-draft"
OWN_HOOK = "org.fhirgallop.exam-draft"
EMPTY = {"resourceType": "Bundle", "type": "searchset", "total": 0}
FAILED = {
    "resourceType": "OperationOutcome",
    "issue": [{"severity": "error", "code": "processing", "details": {"text": "unable"}}],
}
TOKEN = "some-opaque-secret-for-this-test"
AUTHORISATION = {"access_token": TOKEN, "token_type": "Bearer", "expires_in": 300,
                 "scope": "user/Observation.read", "subject": "fhirgallop"}  # fmt: skip


def rules(answer: Any) -> set[str]:
    """The rules of an OperationOutcome."""
    outcome = answer.json()
    assert outcome["resourceType"] == "OperationOutcome"
    return {issue["details"]["coding"][0]["code"] for issue in outcome["issue"]}


def without(value: Json, name: str) -> Json:
    return {key: one for key, one in value.items() if key != name}


def detail(answer: Any) -> str:
    assert answer.status_code == 200, answer.text
    (card,) = answer.json()["cards"]
    return str(card["detail"])


def test_ch_1_json_both_ways(hooked: TestClient, hook_call: Make) -> None:
    answer = hooked.post(VIEW, json=hook_call())
    assert answer.status_code == 200
    assert answer.headers["content-type"] == "application/json"
    form = hooked.post(VIEW, content=json.dumps(hook_call()), headers={"Content-Type": "text/plain"})
    assert form.status_code == 415


def test_ch_4_unknown_members_and_extensions_are_ignored(hooked: TestClient, hook_call: Make) -> None:
    call = hook_call()
    extended = {**call, "extension": {"org.example.x": {"a": 1}}, "later": [1, {"deep": None}]}
    extended["context"] = {**call["context"], "extension": {"org.example.y": 1}, "more": "x"}
    plain = hooked.post(VIEW, json=call).json()
    assert hooked.post(VIEW, json=extended).json() == plain
    assert plain["cards"]


@pytest.mark.parametrize(
    "text",
    [
        '{"hook": "patient-view",}',
        '{"hook": "patient-view" // a\n}',
        "{",
        "",
        "[]",
        "1",
        '{"hook": "a", "hook": "b"}',
        '{"a": NaN}',
    ],
)
def test_ch_5_only_plain_json(hooked: TestClient, text: str) -> None:
    answer = hooked.post(VIEW, content=text, headers={"Content-Type": "application/json"})
    assert answer.status_code == 400
    assert rules(answer)


@pytest.mark.parametrize(
    "context",
    [
        {"userId": None},
        {"userId": "7"},
        {"userId": "Device/7"},
        {"userId": "Practitioner/"},
        {"userId": "Practitioner/7/8"},
        {"userId": 7},
        {"patientId": None},
        {"patientId": "Patient/p-20417"},
        {"patientId": ""},
        {"patientId": ["p-20417"]},
        {"encounterId": "Encounter/v-8812"},
        {"encounterId": 5},
    ],
)
def test_ch_19_the_context_of_patient_view(hooked: TestClient, hook_call: Make, context: Json) -> None:
    answer = hooked.post(VIEW, json=hook_call(context=context))
    assert answer.status_code == 400
    assert rules(answer) <= {"hook-user", "hook-patient", "hook-encounter"}


@pytest.mark.parametrize(
    ("user", "count"),
    [("Practitioner/7", 1), ("PractitionerRole/7", 1), ("Patient/p-20417", 0), ("RelatedPerson/9", 0)],
)
def test_ch_19_every_user_and_no_encounter(
    hooked: TestClient, hook_call: Make, user: str, count: int
) -> None:
    """A patient who opens the own chart is a user of the hook too; the cards are for clinicians."""
    answer = hooked.post(VIEW, json=hook_call(context={"userId": user, "encounterId": None}))
    assert (answer.status_code, len(answer.json()["cards"])) == (200, count)


def test_ch_20_discharge_needs_user_patient_encounter(hooked: TestClient, hook_call: Make) -> None:
    for name in ("userId", "patientId", "encounterId"):
        answer = hooked.post(DISCHARGE, json=hook_call("encounter-discharge", context={name: None}))
        assert answer.status_code == 400
    of_patient = hook_call("encounter-discharge", context={"userId": "Patient/p-20417"})
    assert hooked.post(DISCHARGE, json=of_patient).status_code == 400


def test_ch_20_the_same_hook_instance_is_answered_alike(hooked: TestClient, hook_call: Make) -> None:
    call = hook_call("encounter-discharge")
    first = hooked.post(DISCHARGE, json=call)
    assert first.json()["cards"]
    assert hooked.post(DISCHARGE, json=call).content == first.content
    later = {**call, "hookInstance": "00000000-0000-4000-8000-000000000001"}
    assert hooked.post(DISCHARGE, json=later).json() == {"cards": []}, "shown once in an encounter"
    assert hooked.post(DISCHARGE, json=call).content == first.content, "also after others asked"


def test_ch_24_the_draft_is_one_bundle(
    hooked: TestClient, hook_call: Make, kept: list[Json], prefetch: Make
) -> None:
    entries = [
        {"fullUrl": f"https://fernwood.example/fhir/Observation/{o['id']}", "resource": o} for o in kept
    ]
    draft = {"resourceType": "Bundle", "type": "collection", "entry": entries}
    call = hook_call(OWN_HOOK, context={"draftObservations": draft}, prefetch=prefetch(exam=None))
    assert "Fourth heart sound" in detail(hooked.post(DRAFT, json=call))
    for wrong in (kept, kept[0], "x"):
        refused = hooked.post(DRAFT, json=hook_call(OWN_HOOK, context={"draftObservations": wrong}))
        assert refused.status_code == 400


@pytest.mark.parametrize("name", ["hook", "hookInstance", "context"])
def test_ch_27_what_is_required(hooked: TestClient, hook_call: Make, name: str) -> None:
    assert hooked.post(VIEW, json=without(hook_call(), name)).status_code == 400


@pytest.mark.parametrize("instance", ["", "1", 5, None, "d1577c69-dfbe-44ad-ba6d-3e05e953b2e", "x" * 36])
def test_ch_27_the_instance_is_a_uuid(hooked: TestClient, hook_call: Make, instance: Any) -> None:
    answer = hooked.post(VIEW, json=hook_call(hookInstance=instance))
    assert (answer.status_code, rules(answer)) == (400, {"hook-instance"})


def test_ch_27_authorisation_needs_a_server(hooked: TestClient, hook_call: Make) -> None:
    call = without(hook_call(fhirAuthorization=AUTHORISATION), "fhirServer")
    answer = hooked.post(VIEW, json=call)
    assert (answer.status_code, rules(answer)) == (400, {"cds-r-1"})


def test_ch_28_status_codes(hooked: TestClient, hook_call: Make) -> None:
    assert hooked.post(VIEW, json=hook_call("encounter-discharge")).status_code == 400
    assert hooked.post("/cds-services/none", json=hook_call()).status_code == 404
    assert hooked.get(VIEW).status_code == 405
    as_xml = hooked.post(VIEW, content="<a/>", headers={"Content-Type": "application/xml"})
    assert as_xml.status_code == 415


@pytest.mark.parametrize("key", ["patient", "exam"])
@pytest.mark.parametrize("sent", ["absent", FAILED, {"resourceType": "Encounter", "id": "v"}, "text", []])
def test_ch_29_needed_data_that_were_not_sent_are_412(
    hooked: TestClient, hook_call: Make, prefetch: Make, key: str, sent: Any
) -> None:
    found = without(prefetch(), key) if sent == "absent" else prefetch(**{key: sent})
    answer = hooked.post(VIEW, json=hook_call(prefetch=found))
    assert answer.status_code == 412


def test_ch_29_no_prefetch_at_all(hooked: TestClient, hook_call: Make) -> None:
    assert hooked.post(VIEW, json=without(hook_call(), "prefetch")).status_code == 412


def test_ch_30_the_outcome_names_the_missing_key(hooked: TestClient, hook_call: Make, prefetch: Make) -> None:
    answer = hooked.post(VIEW, json=hook_call(prefetch=without(without(prefetch(), "exam"), "patient")))
    outcome = answer.json()
    assert answer.status_code == 412
    assert rules(answer) == {"hook-prefetch-missing"}
    named = {issue["diagnostics"] for issue in outcome["issue"]}
    assert named == {"field prefetch.patient", "field prefetch.exam"}
    assert all("prefetch key" in issue["details"]["text"] for issue in outcome["issue"])


def test_ch_31_an_optional_key_that_is_absent_stays_unknown(
    hooked: TestClient, hook_call: Make, prefetch: Make
) -> None:
    text = detail(hooked.post(VIEW, json=hook_call(prefetch=without(prefetch(), "conditions"))))
    assert "not sent: the problem list" in text


def test_ch_31_null_and_an_empty_searchset_mean_that_there_are_none(
    hooked: TestClient, hook_call: Make, prefetch: Make
) -> None:
    for nothing in (None, EMPTY):
        call = hook_call(prefetch=prefetch(conditions=nothing, devices=nothing))
        call["context"]["userId"] = f"Practitioner/{'a' if nothing else 'b'}"
        assert "Unknown to this review" not in detail(hooked.post(VIEW, json=call))


def test_ch_31_an_operation_outcome_means_that_the_client_failed(
    hooked: TestClient, hook_call: Make, prefetch: Make
) -> None:
    text = detail(hooked.post(VIEW, json=hook_call(prefetch=prefetch(procedures=FAILED))))
    assert "not to be had by the record system: procedures" in text


@pytest.mark.parametrize("nothing", [None, EMPTY])
def test_ch_31_no_examination_is_no_card(
    hooked: TestClient, hook_call: Make, prefetch: Make, nothing: Any
) -> None:
    answer = hooked.post(VIEW, json=hook_call(prefetch=prefetch(exam=nothing)))
    assert (answer.status_code, answer.json()) == (200, {"cards": []})


def test_ch_31_a_patient_that_is_null_is_no_fault(
    hooked: TestClient, hook_call: Make, prefetch: Make
) -> None:
    assert hooked.post(VIEW, json=hook_call(prefetch=prefetch(patient=None))).json()["cards"]


def test_ch_32_further_pages_make_the_answer_partial(
    hooked: TestClient, hook_call: Make, prefetch: Make
) -> None:
    found = prefetch()
    more = {"relation": "next", "url": "https://fernwood.example/fhir?page=2"}
    found["results"] = {**found["results"], "link": [more]}
    assert "a part or a page of what was asked for was not sent" in detail(
        hooked.post(VIEW, json=hook_call(prefetch=found))
    )


def test_ch_33_a_key_is_read_only_as_its_template_says(
    hooked: TestClient, hook_call: Make, prefetch: Make, searchset: Any
) -> None:
    single = prefetch()["results"]["entry"][0]["resource"]
    alone = hooked.post(VIEW, json=hook_call(prefetch=prefetch(results=single)))
    assert alone.status_code == 200
    # the tracing that raised the card was not sent as a search is answered: it says nothing
    assert "Atrial fibrillation" not in alone.text
    as_search = prefetch(patient=searchset([prefetch()["patient"]]))
    assert hooked.post(VIEW, json=hook_call(prefetch=as_search)).status_code == 412


def test_ch_34_the_token_is_never_kept_or_logged(
    hooked: TestClient, hook_call: Make, caplog: pytest.LogCaptureFixture, tmp_path: Any
) -> None:
    caplog.set_level(logging.DEBUG)
    answer = hooked.post(VIEW, json=hook_call(fhirAuthorization=AUTHORISATION))
    assert answer.json()["cards"]
    assert TOKEN not in caplog.text
    kept = b"".join(path.read_bytes() for path in tmp_path.iterdir())
    assert kept
    assert TOKEN.encode() not in kept


@pytest.mark.parametrize("name", sorted(AUTHORISATION))
def test_ch_35_an_authorisation_is_whole(hooked: TestClient, hook_call: Make, name: str) -> None:
    answer = hooked.post(VIEW, json=hook_call(fhirAuthorization=without(AUTHORISATION, name)))
    assert answer.status_code == 400
    assert f"fhirAuthorization.{name}" in answer.text
    other = {**AUTHORISATION, "token_type": "bearer"}
    assert hooked.post(VIEW, json=hook_call(fhirAuthorization=other)).status_code == 400


@pytest.mark.parametrize(
    "server",
    ["ftp://a.example", "fernwood.example", "https://", "https://u:p@a.example", "https://a.example/?x=1",
     "https://[", 5, "", "https://a.example/ x"],
)  # fmt: skip
def test_a_server_is_an_address(hooked: TestClient, hook_call: Make, server: Any) -> None:
    answer = hooked.post(VIEW, json=hook_call(fhirServer=server))
    assert (answer.status_code, rules(answer)) == (400, {"hook-server"})


def test_ch_38_what_was_taken_back_raises_nothing(
    hooked: TestClient, hook_call: Make, prefetch: Make, kept: list[Json]
) -> None:
    found = prefetch()
    for entry in found["results"]["entry"]:
        entry["resource"]["status"] = "entered-in-error"
    assert "Atrial fibrillation" not in hooked.post(VIEW, json=hook_call(prefetch=found)).text
    cancelled = prefetch()
    for entry in cancelled["exam"]["entry"]:
        entry["resource"]["status"] = "cancelled"
    assert hooked.post(VIEW, json=hook_call(prefetch=cancelled)).json() == {"cards": []}


def test_ch_38_a_refuted_condition_raises_nothing(
    hooked: TestClient, hook_call: Make, prefetch: Make
) -> None:
    said = prefetch("urgent-combination")
    assert (
        hooked.post(VIEW, json=hook_call(prefetch=said)).json()["cards"][0]["summary"]
        == "urgent clinical review"
    )
    status = {"coding": [{"system": "http://terminology.hl7.org/CodeSystem/condition-ver-status",
                          "code": "refuted"}]}  # fmt: skip
    for entry in said["conditions"]["entry"]:
        entry["resource"]["verificationStatus"] = status
        entry["resource"].pop("clinicalStatus", None)
    call = hook_call(prefetch=said, context={"userId": "Practitioner/8"})
    assert "infarction" not in hooked.post(VIEW, json=call).text


@pytest.mark.parametrize(
    ("key", "resource"),
    [
        (
            "conditions",
            {"resourceType": "Condition", "clinicalStatus": "active", "verificationStatus": "confirmed"},
        ),
        ("results", {"resourceType": "Observation", "status": "final", "comment": "as in STU3"}),
        ("procedures", {"resourceType": "Procedure", "status": "completed", "notDone": False}),
    ],
)
def test_ch_39_resources_of_an_older_fhir_are_refused(
    hooked: TestClient, hook_call: Make, prefetch: Make, key: str, resource: Json
) -> None:
    old = {"resourceType": "Bundle", "type": "searchset", "entry": [{"resource": {**resource, "id": "o"}}]}
    answer = hooked.post(VIEW, json=hook_call(prefetch=prefetch(**{key: old})))
    assert (answer.status_code, rules(answer)) == (412, {"hook-old-fhir"})


def test_another_patients_prefetch_is_refused(hooked: TestClient, hook_call: Make, prefetch: Make) -> None:
    other = {**prefetch()["patient"], "id": "p-1"}
    answer = hooked.post(VIEW, json=hook_call(prefetch=prefetch(patient=other)))
    assert (answer.status_code, rules(answer)) == (400, {"hook-other-patient"})


def test_another_patients_examination_is_not_used(
    hooked: TestClient, hook_call: Make, prefetch: Make
) -> None:
    found = prefetch()
    for entry in found["exam"]["entry"]:
        entry["resource"]["subject"] = {"reference": "Patient/p-1"}
    assert hooked.post(VIEW, json=hook_call(prefetch=found)).json() == {"cards": []}


def test_a_draft_of_another_patient_is_refused(
    hooked: TestClient, hook_call: Make, kept: list[Json], searchset: Any
) -> None:
    for one in kept:
        one["subject"] = {"reference": "Patient/p-1"}
    call = hook_call(OWN_HOOK, context={"draftObservations": searchset(kept)})
    answer = hooked.post(DRAFT, json=call)
    assert (answer.status_code, rules(answer)) == (400, {"hook-other-patient"})


def test_a_draft_in_the_clinics_own_words(
    hooked: TestClient, hook_call: Make, prefetch: Make, example: Make
) -> None:
    context = {"record": example(), "map": "fernwood-heart-form"}
    found = prefetch(exam=None)
    answer = hooked.post(DRAFT, json=hook_call(OWN_HOOK, context=context, prefetch=found))
    assert "Fourth heart sound" in detail(answer)
    unknown = hook_call(OWN_HOOK, context={**context, "map": "another"}, prefetch=found)
    assert (hooked.post(DRAFT, json=unknown).status_code) == 400
    broken = hook_call(OWN_HOOK, context={**context, "record": {"a": 1}}, prefetch=found)
    assert hooked.post(DRAFT, json=broken).status_code == 422
    another = {
        **found["patient"],
        "identifier": [{"system": "https://fernwood.example/patients", "value": "F-1"}],
    }
    theirs = hook_call(OWN_HOOK, context=context, prefetch={**found, "patient": another})
    assert rules(hooked.post(DRAFT, json=theirs)) == {"hook-other-patient"}


@pytest.mark.parametrize(
    "context",
    [
        {},
        {"record": {"a": 1}},
        {"record": [], "map": "x"},
        {"record": {"a": 1}, "map": 5},
        {"draftObservations": {"resourceType": "Bundle"}, "record": {"a": 1}, "map": "x"},
    ],
)
def test_a_draft_is_either_observations_or_record_and_map(
    hooked: TestClient, hook_call: Make, context: Json
) -> None:
    answer = hooked.post(DRAFT, json=hook_call(OWN_HOOK, context=context))
    assert (answer.status_code, rules(answer)) == (400, {"hook-draft"})


def test_a_draft_without_an_examination_is_told(
    hooked: TestClient, hook_call: Make, kept: list[Json], searchset: Any
) -> None:
    later = [{**one, "id": f"{one['id']}-b", "effectiveDateTime": "2026-03-14T08:00:00Z"} for one in kept[:5]]
    for bundle in (searchset([]), searchset([*kept, *later])):
        answer = hooked.post(DRAFT, json=hook_call(OWN_HOOK, context={"draftObservations": bundle}))
        assert (answer.status_code, rules(answer)) == (400, {"hook-draft-exam"})


def test_only_an_examination_of_today_and_this_encounter_counts(
    hooked: TestClient, hook_call: Make, prefetch: Make
) -> None:
    other = hook_call(context={"encounterId": "v-9999"})
    assert hooked.post(VIEW, json=other).json() == {"cards": []}
    old = prefetch()
    for entry in old["exam"]["entry"]:
        entry["resource"]["effectiveDateTime"] = "2026-03-12T09:30:00+01:00"
    assert hooked.post(VIEW, json=hook_call(prefetch=old)).json() == {"cards": []}


def test_the_newest_examination_is_todays(
    hooked: TestClient, hook_call: Make, prefetch: Make, kept: list[Json], searchset: Any
) -> None:
    """The fourth sound is gone in the newer of two examinations of one morning."""
    absent = {"coding": [{"system": "https://fhirgallop.org/fhir/CodeSystem/qualifiers",
                          "code": "presence:absent"}]}  # fmt: skip
    newer = json.loads(fhirjson.write(kept))
    renamed = {f"Observation/{one['id']}": f"Observation/{one['id']}-b" for one in newer}
    for one in newer:
        one["id"] += "-b"
        one["effectiveDateTime"] = "2026-03-14T09:55:00+01:00"
        for member in one.get("hasMember", ()):
            member["reference"] = renamed[member["reference"]]
        if any(coding["code"] == "heart-sound.s4" for coding in one["code"]["coding"]):
            one["valueCodeableConcept"] = absent
            one.pop("interpretation", None)
    call = hook_call(prefetch=prefetch(exam=searchset([*kept, *newer])))
    text = detail(hooked.post(VIEW, json=call))
    assert "2026-03-14T09:55:00" in text
    assert "Fourth heart sound: present" not in text


def test_va_8_no_value_of_the_record_is_echoed(
    hooked: TestClient, hook_call: Make, caplog: pytest.LogCaptureFixture
) -> None:
    caplog.set_level(logging.DEBUG)
    secret = "Mrs-Secretperson-1950"
    for changed in (
        {"hook": secret}, {"hookInstance": secret}, {"fhirServer": secret}, {"prefetch": secret},
        {"context": {"userId": secret, "patientId": f"{secret}/", "encounterId": f"{secret}/"}},
    ):  # fmt: skip
        answer = hooked.post(VIEW, json=hook_call(**changed))
        assert answer.status_code == 400
        assert secret not in answer.text
        for issue in answer.json()["issue"]:
            assert issue["details"]["coding"][0]["system"].startswith("https://fhirgallop.org/")
            assert issue["details"]["text"]
    assert secret not in caplog.text


def test_ch_36_no_server_is_ever_called(
    hooked: TestClient, hook_call: Make, prefetch: Make, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Whatever address is named, and although a page and a key are missing."""
    called: list[Any] = []
    monkeypatch.setattr(socket.socket, "connect", lambda _, address: called.append(address))
    monkeypatch.setattr(socket, "getaddrinfo", lambda *asked: called.append(asked))
    found = without(prefetch(), "conditions")
    found["results"] = {**found["results"], "link": [{"relation": "next", "url": "http://127.0.0.1:9/x"}]}
    call = hook_call(fhirServer="http://169.254.1.1/fhir", fhirAuthorization=AUTHORISATION, prefetch=found)
    assert hooked.post(VIEW, json=call).status_code == 200
    assert called == []


@pytest.mark.parametrize(
    ("day", "count"), [("2026-03-14", 1), ("2026-03-13", 1), ("2026-03-12", 0), ("2026-03", 0)]
)
def test_an_examination_of_a_day_without_a_time(
    hooked: TestClient, hook_call: Make, prefetch: Make, day: str, count: int
) -> None:
    """Yesterday evening is within 24 hours; a month says nothing of today."""
    found = prefetch(results=None, conditions=None)
    for entry in found["exam"]["entry"]:
        entry["resource"]["effectiveDateTime"] = day
    assert len(hooked.post(VIEW, json=hook_call(prefetch=found)).json()["cards"]) == count


def test_a_failing_database_is_told_and_keeps_nothing(
    hooked: TestClient, hook_call: Make, monkeypatch: pytest.MonkeyPatch
) -> None:
    call = hook_call()

    def fail(*_: Any, **__: Any) -> bool:
        raise StorageError("OperationalError")

    with monkeypatch.context() as broken:
        broken.setattr(HookStore, "keep", fail)
        answer = hooked.post(VIEW, json=call)
        assert (answer.status_code, rules(answer)) == (503, {"storage-failed"})
    assert hooked.post(VIEW, json=hook_call()).json()["cards"], "nothing counts as shown"


def test_a_memory_that_others_keep_changing_is_told(
    hooked: TestClient, hook_call: Make, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(HookStore, "keep", lambda *_, **__: False)
    answer = hooked.post(VIEW, json=hook_call())
    assert (answer.status_code, rules(answer)) == (503, {"hook-busy"})


def test_an_entry_with_a_time_of_its_own_is_no_earlier_examination(
    hooked: TestClient, hook_call: Make, kept: list[Json], prefetch: Make, searchset: Any,
    monkeypatch: pytest.MonkeyPatch,
) -> None:  # fmt: skip
    """What today's examination was read from is no part of the chart it is held against."""
    read: list[Any] = []

    def seen(exam: Any, context: Any, **named: Any) -> Any:
        read.append((exam, context))
        return review(exam, context, **named)

    monkeypatch.setattr(today, "review", seen)
    for one in kept:
        if "hasMember" not in one and any(c["code"] == "heart-sound.s4" for c in one["code"]["coding"]):
            one["effectiveDateTime"] = "2026-03-14T09:10:00+01:00"
    assert hooked.post(VIEW, json=hook_call(prefetch=prefetch(exam=searchset(kept)))).json()["cards"]
    ((exam, context),) = read
    (entry,) = [one for one in exam.entries if one.finding == "heart-sound.s4"]
    assert entry.time == "2026-03-14T09:10:00+01:00"
    assert [fact.reference for fact in context.facts if "/obs-" in fact.reference] == []
    assert context.facts, "the rest of the chart is read"
