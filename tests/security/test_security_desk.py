"""The desk for people who are signed in: roles, proofs of forms, and a second person's approval."""

from __future__ import annotations

import re
from collections.abc import Callable
from typing import Any

import pytest
from starlette.responses import Response
from starlette.testclient import TestClient

TOLD = {"name": "small", "title": "Small", "address": "https://a.example", "zone": ""}
FILES = {"records": ("a.csv", b"id;nr;when;s4\n1;2;2026-11-03T08:00:00Z;ja\n")}
MAP = """\
template-map: 1
name: small
version: "1"
record:
  patient: {field: id, system: "https://a.example/p"}
  identifier: {field: nr, system: "https://a.example/e"}
  time: {field: when}
lines:
  - finding: heart-sound.s4
    field: s4
    choice: {ja: present, nein: absent}
"""


@pytest.fixture
def service(serving: Callable[..., TestClient]) -> TestClient:
    """A service that wants to know who it is."""
    return serving(admin_token="0" * 64)


def sign_in(service: TestClient, who: str, role: str = "informatician") -> str:
    """Signs somebody in, and gives the proof that pages of ours carry."""
    service.cookies.clear()
    answer = Response()
    service.app.state.gate.people.begin(who, frozenset({role}), answer)  # type: ignore[attr-defined]
    name, _, rest = answer.headers["set-cookie"].partition("=")
    service.cookies.set(name, rest.partition(";")[0])
    found = re.search(r'name="form-token" value="([0-9a-f]{64})"', service.get("/desk").text)
    return found[1] if found else ""


def drafted(service: TestClient, proof: str) -> str:
    answer = service.post("/desk", data={"form-token": proof, **TOLD}, files=FILES, follow_redirects=False)
    assert answer.status_code == 303, answer.text
    draft: str = answer.headers["location"]
    told = {"form-token": proof, "step": "0", "do": "text", "text": MAP}
    assert service.post(f"{draft}/change", data=told).status_code == 200
    return draft


def published(service: TestClient, proof: str, draft: str) -> Any:
    told = {"form-token": proof, "step": "1", "version": "1", "author": "R. Example", "note": "first"}
    return service.post(f"{draft}/publish", data=told)


@pytest.mark.parametrize("role", ["clinician", "operator"])
def test_the_desk_is_the_informaticians(service: TestClient, role: str) -> None:
    sign_in(service, "somebody", role)
    assert service.get("/desk").status_code == 403


def test_nobody_else_gets_a_page_that_says_where_to_sign_in(service: TestClient) -> None:
    answer = service.get("/desk", headers={"Accept": "text/html,*/*;q=0.8"})
    assert answer.status_code == 401
    assert 'href="/sign-in"' in answer.text


@pytest.mark.parametrize("proof", [{}, {"form-token": "0" * 64}])
def test_a_form_with_files_needs_the_proof_too(service: TestClient, proof: dict[str, str]) -> None:
    sign_in(service, "somebody")
    assert service.post("/desk", data={**proof, **TOLD}, files=FILES).status_code == 403


def test_the_proof_of_another_person_is_none(service: TestClient) -> None:
    other = sign_in(service, "another")
    sign_in(service, "somebody")
    assert service.post("/desk", data={"form-token": other, **TOLD}, files=FILES).status_code == 403


def test_a_second_person_approves(service: TestClient) -> None:
    desk = service.app.state.desk  # type: ignore[attr-defined]
    desk.second_person = True
    proof = sign_in(service, "first")
    assert published(service, proof, drafted(service, proof)).status_code == 200
    assert "small" not in desk.shelf
    (one,) = desk.publications.waiting()
    answer = {"id": str(one.id), "person": "S. Example", "answer": "approve"}
    own = service.post("/desk/maps/small/settle", data={"form-token": proof, **answer})
    assert own.status_code == 409
    assert "small" not in desk.shelf
    proof = sign_in(service, "second")
    assert service.post("/desk/maps/small/settle", data={"form-token": proof, **answer}).status_code == 200
    assert desk.shelf["small"].version == "1"
    assert "approved by S. Example" in service.get("/desk/maps/small").text
    assert service.post("/desk/maps/small/settle", data={"form-token": proof, **answer}).status_code == 409


def test_what_is_declined_is_never_used(service: TestClient) -> None:
    desk = service.app.state.desk  # type: ignore[attr-defined]
    desk.second_person = True
    proof = sign_in(service, "first")
    published(service, proof, drafted(service, proof))
    (one,) = desk.publications.waiting()
    proof = sign_in(service, "second")
    answer = {"id": str(one.id), "person": "S. Example", "answer": "decline"}
    service.post("/desk/maps/small/settle", data={"form-token": proof, **answer})
    assert "small" not in desk.shelf
    assert desk.publications.waiting() == []


def test_what_samples_hold_stays_out_of_the_log(service: TestClient, caplog: Any) -> None:
    proof = sign_in(service, "somebody")
    files = {"records": ("Jane Roe.csv", b"id;s4\nSECRET-VALUE;ja\n")}
    with caplog.at_level("DEBUG"):
        answer = service.post("/desk", data={"form-token": proof, **TOLD}, files=files)
    assert "SECRET-VALUE" in answer.text
    assert "SECRET-VALUE" not in caplog.text
    assert "Jane Roe" not in caplog.text
