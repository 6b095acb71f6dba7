"""Access tokens of the site's authorisation server: rows SM-1 to SM-4, SM-10, SM-14, SM-17."""

from __future__ import annotations

import json
import time
from collections.abc import Callable
from typing import Any

import pytest
from starlette.testclient import TestClient

from fhirgallop.service.auth.scopes import read_scopes

Json = dict[str, Any]
HOME = "http://localhost:8470"
AUTHORITY = "https://login.example"
WHERE = "/exams?map=fernwood-heart-form"
WRITING = "system/Observation.cu system/DiagnosticReport.cu system/Provenance.cu"


@pytest.fixture
def example(root: Any) -> Json:
    text = (root / "examples/ehr/fernwood-exam.json").read_text("utf-8")
    found: Json = json.loads(text)
    return found


@pytest.fixture
def ask(fhir_service: TestClient, bearer: Any) -> Callable[[str], Any]:
    """Asks for the list of maps, which any token opens."""
    return lambda token: fhir_service.get("/maps", headers=bearer(token))


def test_sm_4_without_a_token_nothing(fhir_service: TestClient, outcome: Any, example: Json) -> None:
    for answer in (fhir_service.get("/maps"), fhir_service.post(WHERE, json=example)):
        assert outcome(answer) == (401, "login", "auth-login")
        assert answer.headers["www-authenticate"] == "Bearer"


def test_sm_4_a_good_token(ask: Any, authority: Any, access_claims: Any, place: Any) -> None:
    token = authority.sign(access_claims())
    assert ask(token).status_code == 200
    assert ask(token).status_code == 200, "an access token may be used again"
    assert place.asked == ["/as.json"], "keys are kept"


now = int(time.time())
REFUSED: dict[str, Json] = {
    "no iss": {"iss": None},
    "another iss": {"iss": "https://other.example"},
    "no aud": {"aud": None},
    "another aud": {"aud": "https://chart.example/fhir"},
    "aud that begins alike": {"aud": f"{HOME}/fhir/r4/Observation"},
    "no exp": {"exp": None},
    "expired": {"exp": now - 100},
    "from the future": {"iat": now + 1000, "exp": now + 2000},
    "not yet": {"nbf": now + 1000},
    "nobody's": {"client_id": None, "sub": None},
}


@pytest.mark.parametrize("changed", REFUSED.values(), ids=REFUSED)
def test_sm_4_claims_that_are_refused(
    ask: Any, authority: Any, access_claims: Any, changed: Json, outcome: Any
) -> None:
    refused = ask(authority.sign(access_claims(**changed)))
    assert outcome(refused) == (401, "login", "auth-login")
    assert refused.headers["www-authenticate"] == 'Bearer error="invalid_token"'


def test_forged_tokens(ask: Any, authority: Any, ehr: Any, new_signer: Any, access_claims: Any) -> None:
    good = authority.sign(access_claims())
    head, body, signature = good.split(".")
    other_body = authority.sign(access_claims(scope="system/*.d")).split(".")[1]
    for forged in (
        new_signer(authority.kid, "RS384").sign(access_claims()), ehr.sign(access_claims()),
        f"{head}.{other_body}.{signature}", f"{head}.{body}.{signature[:-8]}AAAAAAAA", f"{head}.{body}.",
        authority.sign(access_claims(), kid="as-2"), authority.sign(access_claims(), typ="logout+jwt"),
    ):  # fmt: skip
        assert ask(forged).status_code == 401


@pytest.mark.parametrize("typ", ["at+jwt", "application/at+jwt", "JWT", None])
def test_types_of_access_tokens(ask: Any, authority: Any, access_claims: Any, typ: str | None) -> None:
    """RFC 9068 asks for at+jwt; many authorities write JWT, or nothing."""
    assert ask(authority.sign(access_claims(), typ=typ)).status_code == 200


def test_a_cds_clients_token_is_no_access_token_and_the_other_way_round(
    serving: Any,
    place: Any,
    authority: Any,
    ehr: Any,
    authority_of: Any,
    access_claims: Any,
    cds_claims: Any,
    bearer: Any,
) -> None:
    """Not even where one issuer signs both."""
    given = authority_of(place, authority)
    client = serving(**given, cds_clients={AUTHORITY: [given["authority_keys"]]}, cds_algorithms=["RS384"])
    access = authority.sign(access_claims())
    own = authority.sign(cds_claims(iss=AUTHORITY))
    assert client.get("/maps", headers=bearer(access)).status_code == 200
    assert client.get("/cds-services", headers=bearer(access)).status_code == 401
    assert client.get("/maps", headers=bearer(own)).status_code == 401
    assert client.get("/cds-services", headers=bearer(own)).status_code == 200


@pytest.mark.parametrize(
    ("scope", "status"),
    [
        (WRITING, 200),
        ("system/*.cu", 200),
        ("system/*.*", 200),
        ("system/*.write", 200),
        ("system/*.rs", 403),
        ("system/*.read", 403),
        ("system/Observation.cu", 403),
        (WRITING.replace("Provenance.cu", "Provenance.c"), 403),
        (WRITING.replace("system", "user"), 403),
        (WRITING.replace("system", "patient"), 403),
        ("", 403),
        ("openid profile", 403),
    ],
)
def test_sm_10_an_examination_needs_the_scopes_of_what_it_becomes(
    fhir_service: TestClient, authority: Any, access_claims: Any, bearer: Any, example: Json,
    scope: str, status: int, outcome: Any,
) -> None:  # fmt: skip
    answer = fhir_service.post(WHERE, json=example, headers=bearer(authority.sign(access_claims(scope))))
    assert answer.status_code == status
    if status == 403:
        assert outcome(answer) == (403, "forbidden", "auth-forbidden")
        assert answer.headers["www-authenticate"] == 'Bearer error="insufficient_scope"'
        assert "bundle" not in answer.text


def test_sm_10_checking_needs_any_token(
    fhir_service: TestClient, authority: Any, access_claims: Any, bearer: Any
) -> None:
    patient = {"resourceType": "Patient"}
    assert fhir_service.post("/fhir/r4/$validate", json=patient).status_code == 401
    token = bearer(authority.sign(access_claims("launch")))
    assert fhir_service.post("/fhir/r4/$validate", json=patient, headers=token).status_code == 200


def test_scopes_may_come_as_a_list(
    fhir_service: TestClient, authority: Any, access_claims: Any, bearer: Any, example: Json
) -> None:
    token = authority.sign(access_claims(WRITING.split()))
    assert fhir_service.post(WHERE, json=example, headers=bearer(token)).status_code == 200


def test_a_token_is_believed_no_longer_than_it_lasts(
    serving: Any, place: Any, authority: Any, authority_of: Any, access_claims: Any, bearer: Any
) -> None:
    """What was found of a token is kept, but not beyond its end."""
    client = serving(**authority_of(place, authority), clock_skew=0)
    token = bearer(authority.sign(access_claims(exp=int(time.time()) + 2)))
    assert client.get("/maps", headers=token).status_code == 200
    time.sleep(2.1)
    assert client.get("/maps", headers=token).status_code == 401


class Asked:
    """An authorisation server's introspection address."""

    def __init__(self, place: Any, serving: Any, tmp_path: Any) -> None:
        secret = tmp_path / "secret"
        secret.write_text("s3cret/with:signs\n")
        self.place = place
        self.client = serving(
            authority=AUTHORITY,
            authority_introspection=f"{place.base}/tell",
            authority_client="gallop",
            authority_secret=secret,
            authority_tokens=f"{AUTHORITY}/token",
        )

    def answers(self, status: int = 200, **claims: Any) -> None:
        known = {
            "active": True, "scope": WRITING, "client_id": "sender", "exp": int(time.time()) + 60,
            "aud": HOME, **claims,
        }  # fmt: skip
        kept = {name: value for name, value in known.items() if value is not None}
        self.place.pages["/tell"] = (status, {}, json.dumps(kept).encode())


@pytest.fixture
def asked(place: Any, serving: Any, tmp_path: Any) -> Asked:
    return Asked(place, serving, tmp_path)


def test_sm_14_a_token_that_the_authority_vouches_for(asked: Asked, bearer: Any, example: Json) -> None:
    asked.answers()
    for _ in range(3):
        assert asked.client.post(WHERE, json=example, headers=bearer("opaque-1")).status_code == 200
    assert asked.place.asked == ["/tell"], "asked once a minute at most"


@pytest.mark.parametrize(
    "claims",
    [{"active": False}, {"active": "true"}, {"active": None}, {"exp": None}, {"exp": 1}, {"client_id": None},
     {"aud": None}, {"aud": "https://chart.example"}, {"iss": "https://other.example"}],
)  # fmt: skip
def test_sm_14_answers_that_vouch_for_nothing(asked: Asked, bearer: Any, claims: Json) -> None:
    asked.answers(**claims)
    assert asked.client.get("/maps", headers=bearer("opaque-1")).status_code == 401


@pytest.mark.parametrize("status", [401, 500, 302])
def test_sm_14_an_authority_that_does_not_answer(
    asked: Asked, bearer: Any, outcome: Any, status: int
) -> None:
    asked.answers(status)
    assert outcome(asked.client.get("/maps", headers=bearer("x"))) == (503, "transient", "auth-unreachable")


def test_sm_14_scopes_of_the_answer_count(asked: Asked, bearer: Any, example: Json) -> None:
    asked.answers(scope="system/Observation.rs")
    assert asked.client.post(WHERE, json=example, headers=bearer("opaque-2")).status_code == 403


@pytest.mark.parametrize("edition", ["r4", "r4b", "r5"])
@pytest.mark.parametrize("accept", ["application/json", "application/fhir+json", "text/html"])
def test_sm_1_2_3_the_smart_configuration(fhir_service: TestClient, edition: str, accept: str) -> None:
    """Members that SMART App Launch 2.2 requires of a server without a user's launch."""
    answer = fhir_service.get(f"/fhir/{edition}/.well-known/smart-configuration", headers={"Accept": accept})
    assert answer.status_code == 200, "no token is needed"
    assert answer.headers["content-type"] == "application/json"
    told = answer.json()
    assert told["token_endpoint"] == f"{AUTHORITY}/token"
    assert told["grant_types_supported"] == ["client_credentials"]
    assert told["token_endpoint_auth_methods_supported"] == ["private_key_jwt"]
    assert {"client-confidential-asymmetric", "permission-v2"} <= set(told["capabilities"])
    assert "S256" in told["code_challenge_methods_supported"]
    assert "plain" not in told["code_challenge_methods_supported"]
    # what is not there is not promised
    assert not {"authorization_endpoint", "introspection_endpoint", "issuer"} & set(told)
    assert not any(
        one.startswith(("launch", "sso", "context", "permission-patient")) for one in told["capabilities"]
    )


def test_sm_3_every_listed_scope_is_understood(fhir_service: TestClient) -> None:
    told = fhir_service.get("/fhir/r4/.well-known/smart-configuration").json()
    for scope in told["scopes_supported"]:
        assert read_scopes(scope).refused == 0
        assert read_scopes(scope).understood


def test_without_an_authority_there_is_no_configuration(cds_service: TestClient, outcome: Any) -> None:
    answer = cds_service.get("/fhir/r4/.well-known/smart-configuration")
    assert outcome(answer) == (404, "not-found", "auth-no-authority")


def test_our_own_public_keys(fhir_service: TestClient) -> None:
    answer = fhir_service.get("/.well-known/jwks.json")
    assert answer.json() == {"keys": []}
    assert "max-age" in answer.headers["cache-control"]
