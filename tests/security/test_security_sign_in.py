"""People: OpenID Connect sign-in, the administrators' token, sessions, forms, roles.

Published sources: OpenID Connect Core 1.0 (3.1.2, 3.1.3.7), RFC 7636 (S256), RFC 6265bis (`__Host-`).
"""

from __future__ import annotations

import asyncio
import hashlib
import json
import re
import signal
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any
from urllib.parse import parse_qs, urlsplit

import httpx
import pytest
from starlette.testclient import TestClient

HOME = "https://localhost:8470"
SECRET = "a token of the administrators 0123456789"
DIGEST = hashlib.sha256(SECRET.encode()).hexdigest()


@pytest.fixture(scope="module")
def provider(root: Path) -> Iterator[httpx.Client]:
    """The OpenID Connect provider, in a process of its own."""
    running = subprocess.Popen(
        [sys.executable, str(root / "tests/peers/authority.py")], stdout=subprocess.PIPE, text=True
    )
    assert running.stdout
    address = running.stdout.readline().strip()
    with httpx.Client(base_url=address, trust_env=False) as client:
        yield client
    running.send_signal(signal.SIGTERM)
    running.communicate(timeout=10)


@pytest.fixture
def browser(serving: Any, provider: httpx.Client, tmp_path: Path) -> TestClient:
    """A browser before a service where people sign in."""
    provider.post("/behave", content="{}")
    secret = tmp_path / "secret"
    secret.write_text("s3cret/with:signs\n")
    client: TestClient = serving(
        address=HOME,
        sign_in=str(provider.base_url).rstrip("/"),
        sign_in_client="gallop",
        sign_in_secret=secret,
        sign_in_roles={"cardiology-it": "informatician", "night-watch": "operator"},
        admin_token=DIGEST,
    )
    client.base_url = HOME  # type: ignore[assignment]
    client.follow_redirects = False
    return client


def back_from(browser: TestClient, provider: httpx.Client) -> Any:
    """Goes to the provider and comes back."""
    start = browser.get("/sign-in/start")
    assert start.status_code == 303
    sent = provider.get(start.headers["location"])
    assert sent.status_code == 302, sent.text
    return browser.get(sent.headers["location"])


def test_signing_in_and_out(browser: TestClient, provider: httpx.Client) -> None:
    assert browser.get("/cds-feedback").status_code == 401
    answer = back_from(browser, provider)
    assert (answer.status_code, answer.headers["location"]) == (303, "/sign-in")
    page = browser.get("/sign-in").text
    assert "signed in as informatician" in page
    assert browser.get("/cds-feedback").status_code == 200
    (token,) = re.findall(r'name="form-token" value="([0-9a-f]{64})"', page)
    assert browser.post("/sign-out", data={"form-token": token}).status_code == 303
    assert browser.get("/cds-feedback").status_code == 401


def test_what_is_asked_of_the_provider(browser: TestClient) -> None:
    start = browser.get("/sign-in/start")
    asked = {k: v[0] for k, v in parse_qs(urlsplit(start.headers["location"]).query).items()}
    assert asked["response_type"] == "code"
    assert asked["redirect_uri"] == f"{HOME}/sign-in/answer"
    assert asked["code_challenge_method"] == "S256"
    assert re.fullmatch(r"[A-Za-z0-9_-]{43}", asked["code_challenge"])
    assert len({asked["state"], asked["nonce"], asked["code_challenge"]}) == 3
    again = browser.get("/sign-in/start")
    assert parse_qs(urlsplit(again.headers["location"]).query)["state"] != [asked["state"]]


@pytest.mark.parametrize("path", ["/sign-in/start", "/sign-in"])
def test_cookies_are_for_this_host_alone(browser: TestClient, path: str) -> None:
    answer = browser.get(path) if path.endswith("start") else browser.post(path, data={"token": SECRET})
    (cookie,) = answer.headers.get_list("set-cookie")
    name, _, rest = cookie.partition("=")
    assert name.startswith("__Host-")
    attributes = {part.strip().lower() for part in rest.split(";")[1:]}
    assert {"secure", "httponly", "samesite=lax", "path=/"} <= attributes
    assert not any(one.startswith("domain") for one in attributes)


BAD_TOKENS: dict[str, dict[str, Any]] = {
    "another issuer": {"claims": {"iss": "https://other.example"}},
    "another audience": {"claims": {"aud": "other"}},
    "for several, and another in charge": {"claims": {"aud": ["gallop", "other"], "azp": "other"}},
    "another nonce": {"claims": {"nonce": "x"}},
    "no nonce": {"claims": {"nonce": None}},
    "expired": {"claims": {"exp": 1}},
    "endless": {"claims": {"exp": None}},
    "nobody": {"claims": {"sub": None}},
    "no roles": {"claims": {"roles": None}},
    "a role that is none here": {"claims": {"roles": ["operator", "informatician"]}},
    "roles in an odd form": {"claims": {"roles": {"cardiology-it": True}}},
    "another key": {"forge": True},
    "refused by the provider": {"deny": True},
}


@pytest.mark.parametrize("behaviour", BAD_TOKENS.values(), ids=BAD_TOKENS)
def test_who_is_not_let_in(browser: TestClient, provider: httpx.Client, behaviour: Any, outcome: Any) -> None:
    provider.post("/behave", content=json.dumps(behaviour))
    assert outcome(back_from(browser, provider)) == (403, "login", "auth-sign-in")
    assert browser.get("/cds-feedback").status_code == 401


@pytest.mark.parametrize(
    "discovery",
    [{"issuer": "https://other.example"}, {"token_endpoint": "https://other.example/token"},
     {"jwks_uri": "http://127.0.0.1:1/keys"}, {"authorization_endpoint": "javascript:alert(1)"},
     {"token_endpoint": None}],
)  # fmt: skip
def test_a_provider_that_leads_elsewhere(browser: TestClient, provider: httpx.Client, discovery: Any) -> None:
    """Secrets and browsers go to no other host than the one that was set."""
    provider.post("/behave", content=json.dumps({"discovery": discovery}))
    assert browser.get("/sign-in/start").status_code == 503


def test_an_answer_for_another_browser(browser: TestClient, provider: httpx.Client) -> None:
    """Somebody else's answer (login CSRF), a changed state, one without the cookie, one that was used."""
    start = browser.get("/sign-in/start").headers["location"]
    mine = provider.get(start).headers["location"]
    browser.cookies.clear()
    assert browser.get(mine).status_code == 403
    browser.get("/sign-in/start")
    assert browser.get(mine).status_code == 403
    own = provider.get(browser.get("/sign-in/start").headers["location"]).headers["location"]
    assert browser.get(own.replace("state=", "state=x")).status_code == 403
    assert browser.get(own.replace("iss=http", "iss=x")).status_code == 403
    assert browser.get(own.replace("code=", "code=x")).status_code == 403
    assert browser.get(own).status_code == 303
    assert browser.get(own).status_code == 403


def test_roles_are_kept_apart(browser: TestClient, provider: httpx.Client) -> None:
    provider.post("/behave", content=json.dumps({"claims": {"roles": "night-watch"}}))
    back_from(browser, provider)
    assert "signed in as operator" in browser.get("/sign-in").text
    assert browser.get("/cds-feedback").status_code == 403
    assert browser.get("/maps").status_code == 200


def test_a_sign_in_opens_no_clinical_data(browser: TestClient, provider: httpx.Client) -> None:
    back_from(browser, provider)
    assert browser.post("/exams?map=fernwood-heart-form", json={}).status_code == 401
    assert browser.get("/cds-services").status_code == 401


def test_a_form_needs_its_proof(browser: TestClient, provider: httpx.Client) -> None:
    """Without the token of our own page nothing is changed, whoever's cookie comes along."""
    back_from(browser, provider)
    page = browser.get("/sign-in").text
    (token,) = re.findall(r'name="form-token" value="([0-9a-f]{64})"', page)
    for data in ({}, {"form-token": ""}, {"form-token": token[:-1]}, {"form-token": "0" * 64}):
        assert browser.post("/sign-out", data=data).status_code == 403
    assert browser.post("/sign-out", json={"form-token": token}).status_code == 403
    assert browser.post("/sign-out", content=f"form-token={token}").status_code == 403
    assert browser.get("/cds-feedback").status_code == 200
    assert browser.post("/sign-out", headers={"X-Form-Token": token}).status_code == 303


def test_a_session_ends_by_itself_and_is_kept_as_a_digest(
    browser: TestClient, provider: httpx.Client, tmp_path: Path
) -> None:
    back_from(browser, provider)
    secret = browser.cookies["__Host-fhirgallop"]
    kept = b"".join(path.read_bytes() for path in tmp_path.glob("security.sqlite3*"))
    assert secret.encode() not in kept
    assert b"p-1" not in kept
    people = browser.app.state.gate.people  # type: ignore[attr-defined]
    people._clock = lambda: 4_102_444_800.0  # 2100
    assert browser.get("/cds-feedback").status_code == 401


def test_the_administrators_token(browser: TestClient, bearer: Any, outcome: Any) -> None:
    assert browser.get("/cds-feedback", headers=bearer(SECRET)).status_code == 200
    assert browser.get("/maps", headers=bearer(SECRET)).status_code == 200
    assert outcome(browser.get("/cds-feedback", headers=bearer(DIGEST))) == (401, "login", "auth-login")
    assert browser.post("/exams?map=fernwood-heart-form", json={}, headers=bearer(SECRET)).status_code == 401


def test_signing_in_with_the_administrators_token(browser: TestClient) -> None:
    assert browser.post("/sign-in", data={"token": "wrong"}).status_code == 401
    assert browser.post("/sign-in", data={}).status_code == 401
    assert browser.post("/sign-in", data={"token": SECRET}).status_code == 303
    assert "clinician, informatician, operator" in browser.get("/sign-in").text
    assert browser.get("/cds-feedback").status_code == 200


def test_a_form_that_does_not_arrive_is_not_waited_for(
    browser: TestClient, monkeypatch: pytest.MonkeyPatch, outcome: Any
) -> None:
    """The sign-in is open to anybody, so that it may keep nobody's connection for long."""
    monkeypatch.setattr("fhirgallop.service.auth.people._PATIENCE", 0.1)

    async def never(_: Any) -> bytes:
        await asyncio.sleep(3600)
        return b""

    monkeypatch.setattr("starlette.requests.Request.body", never)
    assert outcome(browser.post("/sign-in", data={"token": SECRET})) == (408, "timeout", "http-too-slow")
    large = "token=" + "x" * 300_000
    sent = {"Content-Type": "application/x-www-form-urlencoded"}
    assert browser.post("/sign-in", content=large, headers=sent).status_code == 401


def test_guessing_is_slow(browser: TestClient, bearer: Any, outcome: Any) -> None:
    for n in range(10):
        assert browser.get("/cds-feedback", headers=bearer(f"guess-{n}")).status_code == 401
    told = browser.get("/cds-feedback", headers=bearer(SECRET))
    assert outcome(told) == (429, "throttled", "auth-too-often")
    assert 0 < int(told.headers["retry-after"]) <= 61
    assert browser.post("/sign-in", data={"token": SECRET}).status_code == 429
    brake = browser.app.state.gate.administrators.brake  # type: ignore[attr-defined]
    then = brake._clock() + 61
    brake._clock = lambda: then
    assert browser.get("/cds-feedback", headers=bearer(SECRET)).status_code == 200


def test_good_tokens_of_the_authority_are_no_guesses(
    serving: Any, place: Any, tmp_path: Path, bearer: Any
) -> None:
    """Opaque access tokens look like the administrators'; many new ones slow nobody down."""
    secret = tmp_path / "secret"
    secret.write_text("s")
    client = serving(
        authority="https://login.example", authority_introspection=f"{place.base}/tell",
        authority_client="gallop", authority_secret=secret, authority_tokens="https://login.example/token",
        admin_token=DIGEST,
    )  # fmt: skip
    told = {
        "active": True,
        "scope": "",
        "client_id": "x",
        "exp": 4_102_444_800,
        "aud": "http://localhost:8470",
    }
    place.pages["/tell"] = (200, {}, json.dumps(told).encode())
    for n in range(15):
        assert client.get("/maps", headers=bearer(f"opaque-{n}")).status_code == 200
    assert client.get("/maps", headers=bearer(SECRET)).status_code == 200
    assert len(place.asked) == 15, "the administrators' token is not shown to the authority"
    place.pages["/tell"] = (200, {}, b'{"active": false}')
    statuses = [client.get("/maps", headers=bearer(f"guess-{n}")).status_code for n in range(11)]
    assert statuses == [401] * 10 + [429]


def test_where_no_way_is_set_nobody_signs_in(fhir_service: TestClient, outcome: Any) -> None:
    assert "no way is set" in fhir_service.get("/sign-in").text
    assert outcome(fhir_service.get("/sign-in/start")) == (404, "not-found", "auth-no-sign-in")
    assert fhir_service.post("/sign-in", data={"token": ""}).status_code == 401


def test_opaque_tokens_of_a_real_authority(
    serving: Any, provider: httpx.Client, tmp_path: Path, bearer: Any
) -> None:
    """Introspection with a separate process that checks how we introduce ourselves (RFC 7662, RFC 6749)."""
    home = str(provider.base_url).rstrip("/")
    secret = tmp_path / "secret"
    secret.write_text("s3cret/with:signs")
    client = serving(
        authority=home, authority_introspection=f"{home}/introspect", authority_client="gallop",
        authority_secret=secret, authority_tokens=f"{home}/token",
    )  # fmt: skip
    form = {"grant_type": "client_credentials", "scope": "system/*.rs", "audience": "http://localhost:8470"}
    token = provider.post("/token", data=form, auth=("gallop", "s3cret%2Fwith%3Asigns")).json()[
        "access_token"
    ]
    assert client.get("/maps", headers=bearer(token)).status_code == 200
    assert client.get("/maps", headers=bearer(f"{token}x")).status_code == 401
