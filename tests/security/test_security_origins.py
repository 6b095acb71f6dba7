"""Pages of other sites: row CH-74 (CDS Hooks 2.0.1, "Cross-Origin Resource Sharing"; Fetch Standard)."""

from __future__ import annotations

import hashlib
from typing import Any

import pytest
from starlette.testclient import TestClient

EHR = "https://ehr.example"
ORIGIN = "https://ehr-pages.example"
ASKING = {
    "Origin": ORIGIN,
    "Access-Control-Request-Method": "POST",
    "Access-Control-Request-Headers": "authorization,content-type",
}
CALL = "/cds-services/exam-review-patient-view"


@pytest.fixture
def service(serving: Any, place: Any, ehr: Any) -> TestClient:
    client: TestClient = serving(
        cds_clients={EHR: [place.publish("/ehr.json", ehr)]}, cors_origins=[ORIGIN, "http://localhost:3000"]
    )
    return client


@pytest.mark.parametrize("path", ["/cds-services", CALL, f"{CALL}/feedback"])
def test_ch_74_a_preflight_needs_no_token(service: TestClient, path: str) -> None:
    answer = service.options(path, headers=ASKING)
    assert answer.status_code == 204
    assert answer.headers["access-control-allow-origin"] == ORIGIN
    assert "POST" in answer.headers["access-control-allow-methods"]
    allowed = answer.headers["access-control-allow-headers"].lower()
    assert {"authorization", "content-type"} <= {one.strip() for one in allowed.split(",")}
    assert answer.headers["vary"] == "Origin"


def test_ch_74_answers_may_be_read_errors_too(service: TestClient, ehr: Any, cds_claims: Any) -> None:
    """200, 400, 401, 404, 412, 415."""
    from_page = {"Origin": ORIGIN, "Sec-Fetch-Site": "cross-site", "Sec-Fetch-Mode": "cors"}
    call = {
        "hook": "patient-view", "hookInstance": "d1577c69-dfbe-44ad-ba6d-3e05e953b2ea",
        "context": {"userId": "Practitioner/7", "patientId": "p-1"},
    }  # fmt: skip

    def signed(path: str) -> dict[str, str]:
        return {**from_page, "Authorization": f"Bearer {ehr.sign(cds_claims(path))}"}

    answers = [
        service.get("/cds-services", headers=signed("/cds-services")),
        service.get("/cds-services", headers=from_page),
        service.post(CALL, json=call, headers=signed(CALL)),
        service.post(CALL, json={}, headers=signed(CALL)),
        service.post(CALL, content="x", headers=signed(CALL)),
        service.get("/nowhere", headers=from_page),
    ]
    assert [answer.status_code for answer in answers] == [200, 401, 412, 400, 415, 404]
    for answer in answers:
        assert answer.headers["access-control-allow-origin"] == ORIGIN
        assert "WWW-Authenticate" in answer.headers["access-control-expose-headers"]
        assert "Origin" in answer.headers["vary"]


def test_ch_74_never_with_cookies_and_never_for_all(service: TestClient) -> None:
    for headers in (ASKING, {"Origin": ORIGIN}):
        answer = service.request("OPTIONS" if headers is ASKING else "GET", "/cds-services", headers=headers)
        assert "access-control-allow-credentials" not in answer.headers
        assert answer.headers["access-control-allow-origin"] != "*"


@pytest.mark.parametrize(
    "origin",
    ["https://elsewhere.example", "null", "https://ehr-pages.example.evil.example", "https://evil-ehr-pages.example",
     "http://ehr-pages.example", "https://ehr-pages.example:8443", "https://EHR-pages.example",
     f"{ORIGIN}, https://x.example", f"{ORIGIN}/", ""],
)  # fmt: skip
def test_ch_74_no_other_origin(service: TestClient, origin: str, outcome: Any) -> None:
    for method, headers in (("OPTIONS", ASKING), ("GET", {}), ("POST", {})):
        answer = service.request(method, "/cds-services", headers={**headers, "Origin": origin})
        assert outcome(answer) == (403, "forbidden", "http-origin")
        assert "access-control-allow-origin" not in answer.headers


def test_without_a_list_nothing_is_allowed(cds_service: TestClient) -> None:
    assert cds_service.options("/cds-services", headers=ASKING).status_code == 403
    assert "vary" not in cds_service.get("/health").headers


@pytest.mark.parametrize(
    "host",
    ["elsewhere.example", "localhost.elsewhere.example", "localhost@elsewhere.example",
     "127.0.0.1.nip.example", "2130706433", "0x7f.1", "127.1", "[::ffff:127.0.0.1]",
     "localhost:x@elsewhere.example", "localhost.", "[", ""],
)  # fmt: skip
def test_no_other_name_of_the_host(service: TestClient, host: str, outcome: Any) -> None:
    """A foreign name that points to this machine (DNS rebinding) is not ours."""
    assert outcome(service.get("/health", headers={"Host": host})) == (421, "forbidden", "http-host")


def test_a_link_may_be_followed_but_only_as_a_page(service: TestClient) -> None:
    """A card's link opens from the record system's page; a script, frame or form of it may not."""
    rule = "/rules/s4.in-atrial-fibrillation"
    link = {"Sec-Fetch-Site": "cross-site", "Sec-Fetch-Mode": "navigate", "Sec-Fetch-Dest": "document"}
    assert service.get(rule, headers=link).status_code == 200
    for changed in ({"Sec-Fetch-Dest": "iframe"}, {"Sec-Fetch-Mode": "no-cors"}, {"Sec-Fetch-Mode": "cors"}):
        assert service.get(rule, headers={**link, **changed}).status_code == 403
    assert service.post("/sign-in", headers=link, data={"token": "x"}).status_code == 403
    assert service.get(rule, headers={**link, "Sec-Fetch-Site": "same-site"}).status_code == 200


def test_a_listed_page_does_not_act_for_who_is_signed_in(serving: Any, bearer: Any) -> None:
    """Even a listed origin cannot use somebody's session: what changes needs our own page's proof."""

    client = serving(
        admin_token=hashlib.sha256(b"t").hexdigest(), cors_origins=[ORIGIN], address="https://localhost"
    )
    client.base_url = "https://localhost"
    assert client.post("/sign-in", data={"token": "t"}, follow_redirects=False).status_code == 303
    assert client.post("/sign-out", headers={"Origin": ORIGIN}, data={}).status_code == 403
    assert client.get("/cds-feedback").status_code == 200
