"""What the record system's answer means.

Facts of FHIR R4 http.html (transaction, conditional update, status codes) and RFC 9110, 6585, 6749, named at
each check.
"""

from __future__ import annotations

import json
from datetime import UTC, datetime
from typing import Any

import pytest

from fhirgallop.delivery.answer import judge, no_answer
from fhirgallop.delivery.client import Answer, ClientError
from fhirgallop.delivery.patience import Patience, asked_to_wait

NOW = datetime(2026, 12, 1, 8, 30, tzinfo=UTC)


def answer(status: int, body: Any = None, **headers: str) -> Answer:
    text = body if isinstance(body, bytes) else b"" if body is None else json.dumps(body).encode()
    return Answer(status, {name.replace("_", "-"): value for name, value in headers.items()}, text)


def responses(*statuses: str) -> dict[str, Any]:
    entries = [{"response": {"status": status, "location": f"Observation/{n}/_history/1", "etag": 'W/"1"'}}
               for n, status in enumerate(statuses)]  # fmt: skip
    return {"resourceType": "Bundle", "type": "transaction-response", "entry": entries}


def test_a_whole_transaction_response_is_delivered_and_each_entrys_outcome_is_kept() -> None:
    """http.html, transaction: 200, `transaction-response`, entries in the order of the request."""
    verdict = judge(answer(200, responses("201 Created", "200")), 2)
    assert (verdict.meaning, verdict.well, verdict.reason) == ("delivered", True, "")
    kept = json.loads(verdict.outcome or b"")
    assert kept == {
        "status": 200,
        "entry": [
            {"status": "201 Created", "location": "Observation/0/_history/1", "etag": 'W/"1"'},
            {"status": "200", "location": "Observation/1/_history/1", "etag": 'W/"1"'},
        ],
    }


def test_what_could_harm_a_terminal_is_not_kept() -> None:
    odd = {"status": "200", "location": "Observation/1\x1b[2J", "etag": "x" * 501}
    answered = {**responses(), "entry": [{"response": odd}]}
    assert json.loads(judge(answer(200, answered), 1).outcome or b"")["entry"] == [{"status": "200"}]


@pytest.mark.parametrize(
    ("body", "kind", "well"),
    [
        (b"", "no-bundle", False),
        (b"<html><p>Sign in</p></html>", "no-bundle", False),
        ([1], "no-bundle", False),
        ({"resourceType": "OperationOutcome"}, "no-bundle", False),
        ({"resourceType": "Bundle", "type": "batch-response", "entry": []}, "no-response", True),
        ({"resourceType": "Bundle", "type": "transaction-response"}, "no-response", True),
        (responses("200"), "no-response", True),
        (responses("200", "200", "200"), "no-response", True),
        (responses("200", "422 Unprocessable"), "entry", True),
        (responses("200", ""), "entry", True),
        ({**responses(), "entry": [1, {"response": 2}]}, "entry", True),
    ],
)  # fmt: skip
def test_a_200_that_does_not_say_that_all_was_done_is_no_delivery(body: Any, kind: str, well: bool) -> None:
    verdict = judge(answer(200, body), 2)
    assert (verdict.meaning, verdict.kind, verdict.well, verdict.ends) == ("later", kind, well, True)


@pytest.mark.parametrize("status", [400, 404, 405, 410, 413, 415, 422])
def test_what_would_be_refused_again_wants_a_person(status: int) -> None:
    verdict = judge(answer(status), 1)
    assert (verdict.meaning, verdict.well) == ("failed", True)


@pytest.mark.parametrize(
    ("status", "well", "ends"),
    [
        (409, True, True),  # http.html: version conflict
        (412, True, True),  # http.html, conditional update: several match, or another request was quicker
        (408, False, True), (425, False, True),
        (429, False, False),  # RFC 6585
        (500, False, True), (502, False, True), (504, False, True), (599, False, True),
        (503, False, False),  # RFC 9110: overloaded or down for maintenance
        (201, False, True), (202, False, True), (204, False, True),  # say nothing of the transaction
    ],
)  # fmt: skip
def test_what_may_heal_is_tried_again(status: int, well: bool, ends: bool) -> None:
    verdict = judge(answer(status, retry_after="7"), 1)
    assert (verdict.meaning, verdict.well, verdict.ends, verdict.retry_after) == ("later", well, ends, "7")


@pytest.mark.parametrize("status", [401, 403])
def test_missing_rights_stop_everything_and_fail_nothing(status: int) -> None:
    verdict = judge(answer(status), 1)
    assert (verdict.meaning, verdict.well) == ("denied", False)


@pytest.mark.parametrize(
    ("kind", "meaning", "ends"),
    [
        ("refused", "later", False), ("tls", "later", False), ("timed-out", "later", True),
        ("dropped", "later", True), ("too-large", "later", True),
        ("redirected", "denied", False), ("not-allowed", "denied", False),
    ],
)  # fmt: skip
def test_no_answer_is_tried_again_unless_the_address_is_wrong(kind: Any, meaning: str, ends: bool) -> None:
    verdict = no_answer(ClientError(kind, "https://record.example"))
    assert (verdict.meaning, verdict.kind, verdict.well, verdict.ends) == (meaning, kind, False, ends)


def test_the_reason_names_place_and_code_and_never_what_was_said_of_the_patient() -> None:
    outcome = {
        "resourceType": "OperationOutcome",
        "issue": [
            {"severity": "warning", "code": "informational", "diagnostics": "Eve Brook"},
            {"severity": "error", "code": "invariant", "diagnostics": "Eve Brook, born 1950",
             "details": {"text": "Eve Brook"}, "expression": ["Bundle.entry[3].resource.value"]},
            {"severity": "error", "code": "EveBrook", "expression": ["Bundle.entry.where(name='Eve Brook')"]},
            {"severity": "fatal", "code": "value", "expression": "Eve Brook"},
            {"severity": "error", "code": ["x"], "expression": ["Eve.Brook"]},
        ],
    }  # fmt: skip
    verdict = judge(answer(422, outcome), 1)
    assert verdict.reason == "answered 422: invariant at Bundle.entry[3].resource.value, an issue, value"
    assert json.loads(verdict.outcome or b"")["outcome"] == outcome, "who may see it finds it with the row"
    for odd in (b"{", [1], {"resourceType": "OperationOutcome", "issue": 1}, {"issue": [1]}):
        assert judge(answer(422, odd), 1).reason == "answered 422"


PATIENCE = Patience(first=1000, most=60_000, tries=20, after=5, rest=2000)


def test_waits_double_up_to_the_longest_and_are_drawn_from_nothing_to_the_full() -> None:
    full = [PATIENCE.wait(attempts, lambda: 1.0) for attempts in range(1, 9)]
    assert full == [1000, 2000, 4000, 8000, 16_000, 32_000, 60_000, 60_000]
    assert PATIENCE.wait(0, lambda: 1.0) == 1000
    assert PATIENCE.wait(10**9, lambda: 1.0) == 60_000
    assert [PATIENCE.wait(3, lambda part=part: part) for part in (0.0, 0.5)] == [0, 2000]


def test_a_destination_rests_after_failures_in_a_row_longer_and_longer() -> None:
    assert [PATIENCE.pause(failures, lambda: 1.0) for failures in (0, 1, 4, 5, 6, 7)] == [
        0,
        0,
        0,
        2000,
        4000,
        8000,
    ]
    assert PATIENCE.pause(5, lambda: 0.0) == 1000, "half of it at the least"
    assert PATIENCE.pause(10**6, lambda: 1.0) == 60_000


@pytest.mark.parametrize(
    ("header", "milliseconds"),
    [
        # RFC 9110, section 10.2.3, with its own examples of both forms
        ("120", 120_000), ("0", 0), (" 5 ", 5000), ("Tue, 01 Dec 2026 08:31:00 GMT", 60_000),
        ("Fri, 31 Dec 1999 23:59:59 GMT", 0), ("99999999999999999999", 3_600_000),
        ("Fri, 31 Dec 2099 23:59:59 GMT", 3_600_000),
        ("", 0), ("-5", 0), ("1.5", 0), ("soon", 0), ("٣", 0), ("Tue, 99 Dec 2026 08:31:00 GMT", 0),
        ("Tue, 01 Dec 2026 08:31:00 -0000", 60_000),
    ],
)  # fmt: skip
def test_retry_after_is_read_in_both_forms_and_never_for_longer_than_an_hour(
    header: str, milliseconds: int
) -> None:
    assert asked_to_wait(header, NOW) == milliseconds
