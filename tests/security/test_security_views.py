"""The pages of examinations, rules and deliveries: which role sees which, and no change without proof."""

from __future__ import annotations

import re
from collections.abc import Callable
from html import unescape
from pathlib import Path
from typing import Any

import pytest
from starlette.responses import Response
from starlette.testclient import TestClient

from fhirgallop.api import process
from fhirgallop.codes import fhirjson
from fhirgallop.storage.engine import open_database
from fhirgallop.storage.keys import patient_key
from fhirgallop.storage.submissions import Submission, Submissions

EXAM = "6a1f0f5e-2d0b-4c59-9f6a-0d4b7b1f2c11"
PAGES = {
    "/exams": {"clinician", "informatician"},
    f"/exams/{EXAM}": {"clinician", "informatician"},
    f"/exams/{EXAM}/heart-cycle.svg": {"clinician", "informatician"},
    "/knowledge": {"clinician", "informatician", "operator"},
    "/deliveries": {"operator"},
    "/": {"clinician", "informatician", "operator"},
}


@pytest.fixture
def service(serving: Callable[..., TestClient], root: Path) -> TestClient:
    """A service that wants to know who it is, with one examination."""
    speaking = serving(admin_token="0" * 64)
    record = (root / "examples/ehr/fernwood-exam.json").read_bytes()
    coded = process(record, root / "examples/informatician/fernwood-heart-form.yaml")
    engine = open_database(speaking.app.state.settings.database)  # type: ignore[attr-defined]
    row = Submission(
        f"urn:uuid:{EXAM}", "R4", True, 1, "fernwood-heart-form", "2026.1", "0" * 64,
        patient_key("https://fernwood.example/patients", "F-20417"), "2026-03-14T09:00:00Z",
        fhirjson.write(coded.bundle),
    )  # fmt: skip
    assert Submissions(engine).add(row)
    engine.dispose()
    return speaking


def _sign_in(service: TestClient, role: str) -> None:
    service.cookies.clear()
    answer = Response()
    service.app.state.gate.people.begin("someone", frozenset({role}), answer)  # type: ignore[attr-defined]
    name, _, rest = answer.headers["set-cookie"].partition("=")
    service.cookies.set(name, rest.partition(";")[0])


def test_each_role_sees_its_own_pages_and_the_ways_to_them(service: TestClient) -> None:
    for role in ("clinician", "informatician", "operator"):
        _sign_in(service, role)
        for address, roles in PAGES.items():
            assert service.get(address).status_code == (200 if role in roles else 403), (role, address)
        ways = set(re.findall(r'<a class="button" href="(/\w+)">', service.get("/").text))
        known = {"/exams": "clinician", "/desk": "informatician", "/deliveries": "operator"}
        assert ways == {"/knowledge"} | {address for address, one in known.items() if one == role}


def _chart(root: Path) -> dict[str, Any]:
    chart = (root / "examples/clinician/atrial-fibrillation-today.chart.json").read_bytes()
    return {"chart": ("chart.json", chart, "application/json")}


def test_an_answer_needs_the_proof_of_the_page_it_comes_from(service: TestClient, root: Path) -> None:
    _sign_in(service, "clinician")
    proof = re.search(r'name="form-token" value="([0-9a-f]{64})"', service.get(f"/exams/{EXAM}").text)
    assert proof
    token = {"form-token": proof[1]}
    assert service.post(f"/exams/{EXAM}/chart", files=_chart(root)).status_code == 403
    page = service.post(f"/exams/{EXAM}/chart", data=token, files=_chart(root))
    assert page.status_code == 200
    card = re.search(r'name="card" value="([^"]+)"', page.text)
    assert card
    told = {"card": unescape(card[1]), "answer": "both-true", "reason": "heard again"}
    where = f"/exams/{EXAM}/answers"
    assert service.post(where, data=told).status_code == 403
    assert service.post(where, data={**told, "form-token": "0" * 64}).status_code == 403
    assert service.post(where, data={**told, **token}, follow_redirects=False).status_code == 303
    by_script = service.post(where, data=told, headers={"X-Form-Token": proof[1], "HX-Request": "true"})
    assert by_script.status_code == 200
    _sign_in(service, "operator")
    assert service.post(where, data={**told, **token}).status_code == 403


@pytest.mark.parametrize("path", ["again", "given-up"])
def test_a_delivery_is_changed_by_an_operator_with_proof_alone(service: TestClient, path: str) -> None:
    told = {"number": "1", "reason": "x"}
    _sign_in(service, "clinician")
    assert service.post(f"/deliveries/{path}", data=told).status_code == 403
    _sign_in(service, "operator")
    assert service.post(f"/deliveries/{path}", data=told).status_code == 403
    proof = re.search(r'"X-Form-Token": "([0-9a-f]{64})"', service.get("/deliveries").text)
    assert proof
    answer = service.post(
        f"/deliveries/{path}", data={**told, "form-token": proof[1]}, follow_redirects=False
    )
    assert answer.status_code == 303
