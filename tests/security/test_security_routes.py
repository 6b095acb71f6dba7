"""Every address says what it needs, and none answers a stranger with more than that."""

from __future__ import annotations

import logging
import re
from collections.abc import Callable, Iterator
from typing import Any

import pytest
from fastapi.routing import APIRoute
from starlette.testclient import TestClient

from fhirgallop.service.auth.needs import Need, needs

FILLED = {"edition": "r4", "resource_type": "Observation"}
# addresses that hold no patient's data, and are meant to be read by anybody
OPEN = {
    "/health", "/ready", "/docs", "/style.css", "/static/{name:path}", "/rules/{rule_id}", "/sign-in",
    "/sign-in/start", "/sign-in/answer", "/hooks/org.fhirgallop.exam-draft", "/.well-known/jwks.json",
    "/fhir/{edition}/.well-known/smart-configuration", "/fhir/{edition}/metadata",
}  # fmt: skip


@pytest.fixture
def everything(
    serving: Callable[..., TestClient], place: Any, authority: Any, ehr: Any, authority_of: Any
) -> TestClient:
    """A service with every way in."""
    return serving(
        **authority_of(place, authority),
        cds_clients={"https://ehr.example": [place.publish("/ehr.json", ehr)]},
        admin_token="0" * 64,
    )


def routes_of(client: TestClient) -> Iterator[APIRoute]:
    def below(routes: Any) -> Iterator[APIRoute]:
        for route in routes:
            if isinstance(route, APIRoute):
                yield route
            elif included := getattr(route, "original_router", None):
                yield from below(included.routes)

    yield from below(client.app.routes)  # type: ignore[attr-defined]


def need_of(route: APIRoute) -> list[Need]:
    return [found.call for found in route.dependant.dependencies if isinstance(found.call, Need)]


def test_every_route_says_what_it_needs(everything: TestClient) -> None:
    routes = list(routes_of(everything))
    assert len(routes) > 20
    for route in routes:
        (need,) = need_of(route)
        assert need.open == (route.path in OPEN), f"{route.path} is open, or ought to be"


def test_no_stranger_gets_in(everything: TestClient) -> None:
    """Nor by a token that is none, and whatever stands in the path: 401 comes before 400 and 404."""
    asked = 0
    for route in routes_of(everything):
        if route.path in OPEN:
            continue
        path = re.sub(r"\{(\w+)(:\w+)?\}", lambda found: FILLED.get(found[1], "x"), route.path)
        for method in route.methods:
            for headers in ({}, {"Authorization": "Bearer x.y.z"}, {"Authorization": "Bearer x"}):
                answer = everything.request(method, path, headers=headers)
                assert answer.status_code in (401, 429), (method, path)
                assert "auth-" in answer.text or method == "HEAD"
                asked += 1
        wrong = everything.request(method, path.replace("r4", "r9"))
        assert wrong.status_code == 401, path
    assert asked > 30


def test_open_addresses_ask_nothing(everything: TestClient) -> None:
    for path in ("/health", "/docs", "/style.css", "/rules/s4.in-atrial-fibrillation", "/openapi.json",
                 "/hooks/org.fhirgallop.exam-draft", "/sign-in"):  # fmt: skip
        assert everything.get(path).status_code == 200, path


@pytest.mark.parametrize(
    "given",
    [{}, {"open": True, "token": True}, {"does": "x"}, {"to": ("Observation",)}, {"roles": ("boss",)}],
)
def test_a_need_that_makes_no_sense_is_refused(given: Any) -> None:
    with pytest.raises(ValueError, match=r"open|letters|roles"):
        needs(**given)


def test_without_authorisation_this_machine_may_everything(
    serving: Callable[..., TestClient], caplog: pytest.LogCaptureFixture
) -> None:
    with caplog.at_level(logging.INFO):
        serving(admin_token="0" * 64)
        assert "authorisation is off" not in caplog.text
        client = serving()
    assert "authorisation is off" in caplog.text
    for path in ("/maps", "/cds-services", "/cds-feedback", "/metrics"):
        assert client.get(path).status_code == 200


def test_a_new_administrators_token(call: Callable[..., Any], serving: Any, bearer: Any) -> None:
    """What the command prints goes into the settings, and opens the door."""
    token, setting = call("token").out.decode().splitlines()
    client = serving(admin_token=setting.partition("=")[2])
    assert client.get("/cds-feedback", headers=bearer(token.rpartition(" ")[2])).status_code == 200
    assert client.get("/cds-services", headers=bearer(token.rpartition(" ")[2])).status_code == 401
