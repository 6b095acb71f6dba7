"""Tokens of CDS clients: rows CH-13 and CH-64 to CH-73 (CDS Hooks 2.0.1, "Trusting CDS Clients")."""

from __future__ import annotations

import base64
import hmac
import json
import logging
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import create_engine, text
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.errors import SettingsError

Json = dict[str, Any]
EHR = "https://ehr.example"
HOME = "http://localhost:8470"
CALL = "/cds-services/exam-review-patient-view"


@pytest.fixture
def ask(cds_service: TestClient, bearer: Any) -> Callable[[str], Any]:
    """Asks for the list of services with a token."""
    return lambda token: cds_service.get("/cds-services", headers=bearer(token))


def test_ch_13_64_every_cds_address_needs_a_token(cds_service: TestClient, outcome: Any) -> None:
    for method, path in (("GET", "/cds-services"), ("POST", CALL), ("POST", f"{CALL}/feedback")):
        answer = cds_service.request(method, path, json={} if method == "POST" else None)
        assert outcome(answer) == (401, "login", "auth-login")
        assert answer.headers["www-authenticate"] == "Bearer"


def test_ch_64_a_good_token_is_let_in(ask: Any, ehr: Any, cds_claims: Any) -> None:
    answer = ask(ehr.sign(cds_claims()))
    assert answer.status_code == 200, answer.text
    assert answer.json()["services"]


@pytest.mark.parametrize("alg", ["ES384", "RS384"])
def test_ch_68_both_recommended_algorithms(
    serving: Any, place: Any, new_signer: Any, cds_claims: Any, bearer: Any, alg: str
) -> None:
    signer = new_signer("other", alg)
    client = serving(cds_clients={EHR: [place.publish("/k", signer)]})
    assert client.get("/cds-services", headers=bearer(signer.sign(cds_claims()))).status_code == 200


def test_ch_68_other_algorithms_only_by_setting(
    serving: Any, place: Any, new_signer: Any, cds_claims: Any, bearer: Any
) -> None:
    signer = new_signer("other", "ES256")
    where = {EHR: [place.publish("/k", signer)]}
    token = signer.sign(cds_claims())
    assert serving(cds_clients=where).get("/cds-services", headers=bearer(token)).status_code == 401
    willing = serving(cds_clients=where, cds_algorithms=["ES256"])
    assert willing.get("/cds-services", headers=bearer(token)).status_code == 200


REFUSED_HEADERS: dict[str, Json] = {
    "CH-65 no typ": {"typ": None},
    "CH-65 another typ": {"typ": "at+jwt"},
    "CH-65 no kid": {"kid": None},
    "CH-70 unknown kid": {"kid": "ehr-2"},
    "kid as a path": {"kid": "../../ehr-1"},
    "CH-69 unlisted jku": {"jku": "https://elsewhere.example/keys"},
    "CH-69 empty jku": {"jku": ""},
    "critical header": {"crit": ["exp"], "exp": 1},
}


@pytest.mark.parametrize("header", REFUSED_HEADERS.values(), ids=REFUSED_HEADERS)
def test_headers_that_are_refused(ask: Any, ehr: Any, cds_claims: Any, header: Json, outcome: Any) -> None:
    refused = ask(ehr.sign(cds_claims(), **header))
    assert outcome(refused) == (401, "login", "auth-login")


def _part(value: Json) -> str:
    return _base64(json.dumps(value).encode())


def _base64(raw: bytes) -> str:
    return base64.urlsafe_b64encode(raw).decode().rstrip("=")


NOW = time.time()
REFUSED_CLAIMS: dict[str, Json] = {
    "CH-66 no iss": {"iss": None},
    "CH-66 no aud": {"aud": None},
    "CH-66 no exp": {"exp": None},
    "CH-66 no iat": {"iat": None},
    "CH-66 no jti": {"jti": None},
    "CH-66 empty jti": {"jti": ""},
    "CH-66 endless jti": {"jti": "j" * 300},
    "CH-66 jti is a number": {"jti": 7},
    "CH-66 exp is a text": {"exp": str(int(NOW) + 60)},
    "CH-66 exp is true": {"exp": True},
    "CH-66 exp beyond all time": {"exp": 10**18},
    "CH-69 another iss": {"iss": "https://other.example"},
    "CH-69 iss with a slash more": {"iss": f"{EHR}/"},
    "CH-69 iss as a list": {"iss": [EHR]},
    "CH-67 aud of the base": {"aud": HOME},
    "CH-67 aud with a slash more": {"aud": f"{HOME}/cds-services/"},
    "CH-67 aud of a service": {"aud": HOME + CALL},
    "CH-67 aud of another host": {"aud": "https://elsewhere.example/cds-services"},
    "CH-67 aud in other letters": {"aud": f"{HOME}/CDS-services"},
    "CH-67 aud is a pattern": {"aud": f"{HOME}/*"},
    "CH-71 expired": {"iat": int(NOW) - 400, "exp": int(NOW) - 120},
    "CH-71 issued in the future": {"iat": int(NOW) + 3600, "exp": int(NOW) + 3660},
    "CH-71 ends before it begins": {"iat": int(NOW) + 30, "exp": int(NOW) + 20},
    "CH-71 lives too long": {"exp": int(NOW) + 7200},
    "not before the future": {"nbf": int(NOW) + 3600},
}


@pytest.mark.parametrize("changed", REFUSED_CLAIMS.values(), ids=REFUSED_CLAIMS)
def test_claims_that_are_refused(ask: Any, ehr: Any, cds_claims: Any, changed: Json, outcome: Any) -> None:
    refused = ask(ehr.sign(cds_claims(**changed)))
    assert outcome(refused) == (401, "login", "auth-login")
    assert refused.headers["www-authenticate"] == 'Bearer error="invalid_token"'


def test_ch_67_the_audience_may_be_a_list_and_is_the_very_address(
    cds_service: TestClient, ehr: Any, cds_claims: Any, bearer: Any
) -> None:
    """One token of many audiences is still good once only, and at each address by that address."""
    listed = ehr.sign(cds_claims(aud=["https://elsewhere.example", f"{HOME}/cds-services"]))
    assert cds_service.get("/cds-services", headers=bearer(listed)).status_code == 200
    for path in (CALL, f"{CALL}/feedback"):
        own = bearer(ehr.sign(cds_claims(path)))
        assert cds_service.post(path, json={}, headers=own).status_code not in (401, 403)
        other = bearer(ehr.sign(cds_claims("/cds-services")))
        assert cds_service.post(path, json={}, headers=other).status_code == 401


def test_ch_68_none_and_symmetric_algorithms(ask: Any, ehr: Any, cds_claims: Any) -> None:
    """The classic forgeries: no signature, and the public key taken as a shared secret."""
    claims = cds_claims()
    bare = _part({"alg": "none", "kid": ehr.kid, "typ": "JWT"}) + "." + _part(claims) + "."
    assert ask(bare).status_code == 401
    assert ask(bare + _base64(b"x")).status_code == 401
    for secret in (json.dumps(ehr.public), ehr.key.as_pem(private=False).decode(), ""):
        for alg in ("HS256", "HS384"):
            signed = f"{_part({'alg': alg, 'kid': ehr.kid, 'typ': 'JWT'})}.{_part(claims)}"
            forged = f"{signed}.{_hmac(secret, signed, alg)}"
            assert ask(forged).status_code == 401
    with pytest.raises(SettingsError, match="CDS_ALGORITHMS"):
        settings.load(cds_algorithms=["HS384"])


def _hmac(secret: str, text: str, alg: str) -> str:
    return _base64(hmac.digest(secret.encode(), text.encode(), f"sha{alg[2:]}"))


def test_ch_68_a_symmetric_key_in_a_key_set_is_no_key(
    serving: Any, place: Any, cds_claims: Any, bearer: Any
) -> None:
    secret = "0123456789012345678901234567890123456789"
    shared = {"kty": "oct", "k": _base64(secret.encode()), "kid": "s", "alg": "HS384"}
    place.pages["/k"] = (200, {}, json.dumps({"keys": [shared]}).encode())
    client = serving(cds_clients={EHR: [f"{place.base}/k"]})
    signed = f"{_part({'alg': 'HS384', 'kid': 's', 'typ': 'JWT'})}.{_part(cds_claims())}"
    token = f"{signed}.{_hmac(secret, signed, 'HS384')}"
    assert client.get("/cds-services", headers=bearer(token)).status_code == 401


def test_forged_and_broken_tokens(ask: Any, ehr: Any, new_signer: Any, cds_claims: Any) -> None:
    good = ehr.sign(cds_claims())
    head, body, signature = good.split(".")
    other = new_signer(ehr.kid, "ES384").sign(cds_claims())
    changed = _part({**cds_claims(), "iss": EHR})
    twice = _base64(f'{{"iss": "x", "iss": "{EHR}"}}'.encode())
    for forged in (
        other, f"{head}.{changed}.{signature}", f"{head}.{body}.", f"{head}.{body}", f".{body}.{signature}",
        f"{head}.{body}.{signature}.{signature}", f"{head}.{twice}.{signature}", "x", ".", "..", "a.b.c",
        f"{head}.{body}.{signature[:-4]}", "é", "A" * 20_000,
        f"{_part({'alg': ['ES384']})}.{body}.{signature}",
        f"{_base64(b'[1]')}.{body}.{signature}", f"{_base64(bytes([255, 254]))}.{body}.{signature}",
        f"{_base64(b'{' * 5000)}.{body}.{signature}",
    ):  # fmt: skip
        assert ask(forged).status_code == 401, forged[:80]
    assert ask(good).status_code == 200, "none of these used it up"


def test_ch_69_keys_are_bound_to_their_issuer(
    serving: Any, place: Any, ehr: Any, new_signer: Any, cds_claims: Any, bearer: Any
) -> None:
    other = new_signer("other-1")
    own, foreign = place.publish("/a", ehr), place.publish("/b", other)
    client = serving(cds_clients={EHR: [own], "https://other.example": [foreign]})

    def ask(token: str) -> int:
        status: int = client.get("/cds-services", headers=bearer(token)).status_code
        return status

    assert ask(ehr.sign(cds_claims(), jku=own)) == 200
    assert ask(other.sign(cds_claims(iss="https://other.example"), jku=foreign)) == 200
    assert ask(other.sign(cds_claims(), jku=foreign)) == 401
    assert ask(other.sign(cds_claims())) == 401
    assert ask(other.sign(cds_claims(iss="https://other.example"), jku=own)) == 401


@pytest.mark.parametrize("trick", ["unlisted", "query", "user", "case", "dots"])
def test_ch_69_an_unlisted_jku_is_never_asked(
    cds_service: TestClient, place: Any, new_signer: Any, cds_claims: Any, bearer: Any, trick: str
) -> None:
    """No request goes out for an address that a token names and the settings do not (SSRF)."""
    mine = new_signer("mine")
    evil = place.publish("/evil.json", mine)
    listed = place.base + "/ehr.json"
    jku = {
        "unlisted": evil,
        "query": f"{listed}?x=/evil.json",
        "user": listed.replace("http://", "http://localhost:1@"),
        "case": listed.replace("http", "HTTP"),
        "dots": place.base + "/x/../evil.json",
    }[trick]
    token = mine.sign(cds_claims(), jku=jku)
    assert cds_service.get("/cds-services", headers=bearer(token)).status_code == 401
    assert place.asked == []


def test_ch_69_a_redirection_is_not_followed(
    cds_service: TestClient, place: Any, new_signer: Any, ehr: Any, cds_claims: Any, bearer: Any, outcome: Any
) -> None:
    mine = new_signer("mine")
    place.pages["/ehr.json"] = (302, {"Location": place.publish("/evil.json", mine)}, b"")
    answer = cds_service.get("/cds-services", headers=bearer(mine.sign(cds_claims())))
    assert outcome(answer) == (503, "transient", "auth-unreachable")
    assert place.asked == ["/ehr.json"]


@pytest.mark.parametrize(
    "text",
    [b"", b"[]", b"{}", b'{"keys": {}}', b'{"keys": "x"}', b"\xff", b"x" * 400_000,
     b'{"keys": [' + b",".join([b"{}"] * 101) + b"]}"],
)  # fmt: skip
def test_ch_69_what_is_no_key_set_is_none(
    cds_service: TestClient, place: Any, ehr: Any, cds_claims: Any, bearer: Any, text: bytes
) -> None:
    place.pages["/ehr.json"] = (200, {}, text)
    answer = cds_service.get("/cds-services", headers=bearer(ehr.sign(cds_claims())))
    assert answer.status_code == 503
    assert answer.headers["retry-after"]


def test_ch_70_several_keys_of_one_name_are_refused(
    serving: Any, place: Any, ehr: Any, new_signer: Any, cds_claims: Any, bearer: Any
) -> None:
    client = serving(cds_clients={EHR: [place.publish("/k", ehr, new_signer(ehr.kid))]})
    assert client.get("/cds-services", headers=bearer(ehr.sign(cds_claims()))).status_code == 401


def test_ch_70_the_kind_of_key_counts_too(
    serving: Any, place: Any, ehr: Any, new_signer: Any, cds_claims: Any, bearer: Any
) -> None:
    """An RSA key and an elliptic one of the same name do not stand in each other's way."""
    other = new_signer(ehr.kid, "RS384")
    plain = {name: value for name, value in other.public.items() if name != "alg"}
    client = serving(cds_clients={EHR: [place.publish("/k", ehr)]})
    curve = {name: value for name, value in ehr.public.items() if name != "alg"}
    place.pages["/k"] = (200, {}, json.dumps({"keys": [plain, curve]}).encode())
    for signer in (ehr, other):
        assert client.get("/cds-services", headers=bearer(signer.sign(cds_claims()))).status_code == 200


def test_ch_70_keys_may_be_changed(
    cds_service: TestClient, place: Any, ehr: Any, new_signer: Any, cds_claims: Any, bearer: Any
) -> None:
    """A new key is found on the first token that names it; without one, nobody is asked again at once."""

    def ask(signer: Any) -> int:
        status: int = cds_service.get("/cds-services", headers=bearer(signer.sign(cds_claims()))).status_code
        return status

    assert ask(ehr) == 200
    newer = new_signer("ehr-2")
    place.publish("/ehr.json", ehr, newer)
    assert ask(newer) == 200
    assert place.asked == ["/ehr.json"] * 2
    for n in range(5):
        assert ask(new_signer(f"guess-{n}")) == 401
    assert place.asked == ["/ehr.json"] * 2, "the second asking for an unknown key has to wait"


def test_ch_71_a_token_is_good_once(ask: Any, ehr: Any, cds_claims: Any, outcome: Any) -> None:
    token = ehr.sign(cds_claims())
    assert ask(token).status_code == 200
    assert outcome(ask(token)) == (401, "login", "auth-login")
    again = cds_claims()
    assert ask(ehr.sign({**again, "jti": "one"})).status_code == 200
    assert ask(ehr.sign({**again, "jti": "one", "exp": again["exp"] + 1})).status_code == 401


def test_ch_71_the_memory_of_used_tokens_outlives_the_process(
    serving: Any, place: Any, ehr: Any, cds_claims: Any, bearer: Any
) -> None:
    where = {EHR: [place.publish("/k", ehr)]}
    token = bearer(ehr.sign(cds_claims()))
    assert serving(cds_clients=where).get("/cds-services", headers=token).status_code == 200
    assert serving(cds_clients=where).get("/cds-services", headers=token).status_code == 401


def test_ch_71_whether_a_token_was_used_must_be_known(
    cds_service: TestClient, ehr: Any, cds_claims: Any, bearer: Any, outcome: Any, tmp_path: Path
) -> None:
    """With a database that fails nobody is let in, and nothing is answered."""
    with create_engine(f"sqlite:///{tmp_path / 'security.sqlite3'}").begin() as connection:
        connection.execute(text("DROP TABLE used_tokens"))
    answer = cds_service.get("/cds-services", headers=bearer(ehr.sign(cds_claims())))
    assert outcome(answer) == (503, "transient", "storage-failed")
    assert "services" not in answer.json()


def test_ch_71_lifetime_and_skew_are_settings(
    serving: Any, place: Any, ehr: Any, cds_claims: Any, bearer: Any
) -> None:
    where = {EHR: [place.publish("/k", ehr)]}
    now = int(time.time())
    strict = serving(cds_clients=where, cds_token_seconds=60, clock_skew=0)
    for claims in (cds_claims(exp=now + 90), cds_claims(iat=now - 40, exp=now - 5), cds_claims(iat=now + 20)):
        assert strict.get("/cds-services", headers=bearer(ehr.sign(claims))).status_code == 401
    patient = serving(cds_clients=where, clock_skew=60)
    late = ehr.sign(cds_claims(iat=now - 40, exp=now - 5))
    assert patient.get("/cds-services", headers=bearer(late)).status_code == 200


def test_ch_72_no_refusal_says_why(ask: Any, ehr: Any, new_signer: Any, cds_claims: Any) -> None:
    """Whatever is wrong, the same bytes come back."""
    told = {
        ask(token).content
        for token in (
            "x", ehr.sign(cds_claims(exp=1)), ehr.sign(cds_claims(iss="https://other.example")),
            ehr.sign(cds_claims(aud="x")), new_signer(ehr.kid).sign(cds_claims()),
            ehr.sign(cds_claims(), kid="?"),
        )
    }  # fmt: skip
    assert len(told) == 1


def test_ch_72_tokens_are_neither_logged_nor_kept(
    ask: Any, ehr: Any, cds_claims: Any, caplog: pytest.LogCaptureFixture, tmp_path: Path
) -> None:
    good, bad = ehr.sign(cds_claims()), ehr.sign(cds_claims(aud="https://elsewhere.example/F-20417"))
    with caplog.at_level(logging.DEBUG):
        assert ask(good).status_code == 200
        assert ask(bad).status_code == 401
    own = "\n".join(r.getMessage() for r in caplog.records if not r.name.startswith(("httpx", "httpcore")))
    assert "token refused: aud" in own
    kept = b"".join(path.read_bytes() for path in tmp_path.glob("security.sqlite3*"))
    for token in (good, bad):
        for part in token.split(".")[1:]:
            assert part not in own
            assert part.encode() not in kept
    assert "F-20417" not in own


def test_ch_73_keys_from_a_file_for_tokens_without_jku(
    serving: Any, tmp_path: Path, ehr: Any, cds_claims: Any, bearer: Any, place: Any
) -> None:
    path = tmp_path / "ehr.jwks.json"
    path.write_text(json.dumps({"keys": [ehr.public]}), "utf-8")
    client = serving(cds_clients={EHR: [str(path)]})
    assert client.get("/cds-services", headers=bearer(ehr.sign(cds_claims()))).status_code == 200
    for jku in (place.publish("/k", ehr), str(path)):
        assert client.get("/cds-services", headers=bearer(ehr.sign(cds_claims(), jku=jku))).status_code == 401


def test_a_token_is_taken_from_one_header_alone(cds_service: TestClient, ehr: Any, cds_claims: Any) -> None:
    token = ehr.sign(cds_claims())
    named = (("X-Authorization", f"Bearer {token}"), ("Cookie", f"Authorization={token}"))
    for headers in ([("Authorization", f"Bearer {token}")] * 2, [("Authorization", f"Basic {token}")], named):
        assert cds_service.get("/cds-services", headers=headers).status_code == 401
    assert cds_service.get(f"/cds-services?access_token={token}").status_code == 401
    assert cds_service.get("/cds-services", headers={"Authorization": f"bearer {token}"}).status_code == 200
