"""Prefetched resources with parts replaced by anything: an answer or a refusal that says why, never a 500."""

from __future__ import annotations

import copy
import uuid
from collections.abc import Callable, Iterator
from typing import Any

from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from starlette.testclient import TestClient

Json = dict[str, Any]
VIEW = "/cds-services/exam-review-patient-view"
DRAFT = "/cds-services/exam-review-draft"
ANYTHING = st.sampled_from(
    [
        *(
            None,
            "",
            [],
            {},
            0,
            -1,
            True,
            "x",
            "2026-99-99",
            "9999-12-31",
            [None],
            {"a": None},
            [[]],
            10**30,
            1.5,
        ),
        *({"coding": "x"}, {"coding": [None, 1, {"system": 1, "code": []}]}, "\u0000", "urn:uuid:x"),
        *("Observation/", {"reference": "#x"}, {"reference": 5}, [{"reference": "Observation/obs-0"}]),
        "Patient/p-1",
    ]
)


def places(value: Any, path: tuple[Any, ...] = ()) -> Iterator[tuple[Any, ...]]:
    """Every place in a JSON value."""
    if path:
        yield path
    if isinstance(value, dict):
        for name, one in value.items():
            yield from places(one, (*path, name))
    elif isinstance(value, list):
        for index, one in enumerate(value[:6]):
            yield from places(one, (*path, index))


def put(value: Any, path: tuple[Any, ...], new: Any) -> None:
    for step in path[:-1]:
        try:
            value = value[step]
        except (KeyError, IndexError, TypeError):
            return  # an earlier change took this place away
        if not isinstance(value, (dict, list)):
            return
    fits = isinstance(path[-1], int) and path[-1] < len(value) if isinstance(value, list) else True
    if fits:
        value[path[-1]] = new


def test_broken_parts_never_break_the_service(
    hooked: TestClient, hook_call: Callable[..., Json], kept: list[Json], searchset: Any
) -> None:
    view = hook_call()
    draft = hook_call("org.fhirgallop.exam-draft", context={"draftObservations": searchset(kept)})
    addresses = {VIEW: view, DRAFT: draft}
    known = {address: list(places(call)) for address, call in addresses.items()}

    @settings(max_examples=250, deadline=None, derandomize=True, suppress_health_check=list(HealthCheck))
    @given(st.data())
    def send(data: st.DataObject) -> None:
        address = data.draw(st.sampled_from(sorted(addresses)))
        call = copy.deepcopy(addresses[address])
        call["hookInstance"] = str(uuid.uuid5(uuid.NAMESPACE_URL, str(data.draw(st.integers(0, 10**9)))))
        for _ in range(data.draw(st.integers(1, 4))):
            put(call, data.draw(st.sampled_from(known[address])), data.draw(ANYTHING))
        answer = hooked.post(address, json=call)
        assert answer.status_code in (200, 400, 412)
        body = answer.json()
        if answer.status_code == 200:
            for card in body["cards"]:
                assert 0 < len(card["summary"]) < 140
        else:
            assert body["resourceType"] == "OperationOutcome"

    send()


def test_deep_nesting_is_refused(hooked: TestClient) -> None:
    text = '{"prefetch": ' * 3000 + "{}" + "}" * 3000
    answer = hooked.post(VIEW, content=text, headers={"Content-Type": "application/json"})
    assert answer.status_code == 400


def test_a_body_that_is_too_large_is_refused(hooked_with: Any, hook_call: Callable[..., Json]) -> None:
    small = hooked_with(max_body=2048)
    assert small.post(VIEW, json=hook_call()).status_code == 413
