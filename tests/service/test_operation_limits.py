"""Rates and crowding: who asks too much is told when to come again, and nobody else suffers."""

from __future__ import annotations

import contextlib
import threading
import time
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import pytest
from fastapi import FastAPI
from hypothesis import given
from hypothesis import strategies as st

from fhirgallop.service.answers import RefusalError
from fhirgallop.service.limits import Limits, Rate


class Hand:
    """A clock that is set by hand."""

    def __init__(self) -> None:
        self.at = 1000.0

    def __call__(self) -> float:
        return self.at


def test_a_burst_of_two_seconds_then_the_rate() -> None:
    clock = Hand()
    rate = Rate(8, clock)
    let_in = sum(rate.wait("a") == 0 for _ in range(100))
    assert let_in == 17  # the bucket, and the one that finds it full to the brim
    assert rate.wait("a") == 0.125
    assert rate.wait("b") == 0, "one client's haste is not another's"
    clock.at += 0.125
    assert rate.wait("a") == 0
    assert rate.wait("a") > 0


@given(st.lists(st.floats(0, 0.5), max_size=200))
def test_no_more_than_rate_and_burst_are_ever_let_in(steps: list[float]) -> None:
    clock = Hand()
    rate = Rate(20, clock)
    start, let_in = clock.at, 0
    for step in steps:
        clock.at += step
        let_in += rate.wait("a") == 0
        assert let_in <= 20 * (clock.at - start) + 20 * 2 + 1.001


@given(st.floats(0.1, 1000), st.integers(1, 50))
def test_who_waits_as_told_is_let_in(rate_: float, tries: int) -> None:
    clock = Hand()
    rate = Rate(rate_, clock)
    for _ in range(tries):
        wait = rate.wait("a")
        if wait:
            clock.at += wait + 1e-6
            assert rate.wait("a") == 0


def test_no_rate_is_no_limit() -> None:
    rate = Rate(0, Hand())
    assert not any(rate.wait("a") for _ in range(1000))


def test_clients_are_forgotten_before_they_fill_the_memory() -> None:
    rate = Rate(1, Hand())
    for number in range(30_000):
        rate.wait(str(number))
    assert len(rate._empty) <= 20_000
    assert "29999" in rate._empty


def test_too_many_requests_are_429_with_a_time(application: FastAPI, client: Any) -> None:
    clock = Hand()
    application.state.limits = Limits(rate=1, at_once=64, clock=clock)
    statuses = [client.get("/maps").status_code for _ in range(5)]
    assert statuses == [200, 200, 200, 429, 429]
    refused = client.get("/maps")
    assert refused.headers["retry-after"] == "1"
    assert refused.headers["content-type"] == "application/fhir+json"
    assert refused.json()["issue"][0]["code"] == "throttled"
    assert refused.headers["cache-control"] == "no-store"
    for path in ("/health", "/ready", "/metrics"):
        assert client.get(path).status_code == 200, "who looks after the service is let in"
    clock.at += 1
    assert client.get("/maps").status_code == 200


def test_a_crowd_is_told_to_come_again(application: FastAPI, client: Any) -> None:
    limits = application.state.limits
    with contextlib.ExitStack() as crowd:
        for number in range(application.state.settings.at_once):
            crowd.enter_context(limits.counted(f"10.0.0.{number}"))
        refused = client.get("/maps")
        assert refused.status_code == 503
        assert refused.headers["retry-after"]
        assert client.get("/health").status_code == 200
    assert client.get("/maps").status_code == 200
    assert limits.running == 0, "what is answered is worked on no longer"


def test_one_address_cannot_shut_out_all_others() -> None:
    limits = Limits(rate=0, at_once=10, clock=Hand())
    with contextlib.ExitStack() as slow:
        for _ in range(5):
            slow.enter_context(limits.counted("10.0.0.1"))
            assert limits.refusal("10.0.0.1") is None
        with limits.counted("10.0.0.1"):
            refused = limits.refusal("10.0.0.1")
            assert refused is not None
            assert refused.status == 503
        with limits.counted("10.0.0.2"):
            assert limits.refusal("10.0.0.2") is None
    assert limits._running == {}, "nothing is remembered of who has left"


def test_a_caller_has_one_rate_from_all_addresses() -> None:
    limits = Limits(rate=1, at_once=64, clock=Hand())
    for _ in range(3):
        limits.admit_caller("https://ehr.example")
    with pytest.raises(RefusalError) as caught:
        limits.admit_caller("https://ehr.example")
    assert caught.value.status == 429
    limits.admit_caller("https://other.example")
    for _ in range(10):
        limits.admit_caller("")  # nobody has a name where authorisation is off; the address counts


def test_examinations_are_coded_in_turn(application: FastAPI, client: Any, example: Any) -> None:
    """Never more at once than the setting says, and everybody's turn comes."""
    desk, at_once, most, lock = application.state.exams, 0, 0, threading.Lock()
    one = desk.one

    def watched(*given: Any) -> Any:
        nonlocal at_once, most
        with lock:
            at_once += 1
            most = max(most, at_once)
        try:
            time.sleep(0.02)
            return one(*given)
        finally:
            with lock:
                at_once -= 1

    desk.one = watched

    def post(number: int) -> int:
        record = example(exam={"number": f"E-{number}"})
        status: int = client.post("/exams?map=fernwood-heart-form", json=record).status_code
        return status

    with ThreadPoolExecutor(12) as senders:
        assert set(senders.map(post, range(24))) == {200}
    assert most == application.state.settings.coded_at_once
