"""Scopes at the FHIR addresses: rows SM-4, SM-6, SM-8, SM-9, SM-18; nobody gets more through a Bundle."""

from __future__ import annotations

import json
from collections.abc import Callable
from typing import Any

import pytest
from starlette.testclient import TestClient

from fhirgallop.api import process
from fhirgallop.codes import fhirjson

Json = dict[str, Any]
WRITING = "system/Observation.cu system/DiagnosticReport.cu system/Provenance.cu"
CATEGORY = "http://terminology.hl7.org/CodeSystem/observation-category"
EXAM_ONLY = f"system/Observation.rs?category={CATEGORY}|exam"
BASE = "/fhir/r4"
FHIR = {"Content-Type": "application/fhir+json", "Accept": "application/fhir+json"}


@pytest.fixture
def by(fhir_service: TestClient, authority: Any, access_claims: Any, bearer: Any) -> Callable[..., Any]:
    """A request with a token of these scopes: `by("system/*.rs", "GET", "/Observation")`."""

    def ask(scope: str, method: str, path: str, body: Any = None, **headers: str) -> Any:
        token = bearer(authority.sign(access_claims(scope)))
        content = None if body is None else json.dumps(body)
        return fhir_service.request(
            method, BASE + path, content=content, headers={**FHIR, **token, **headers}
        )

    return ask


@pytest.fixture
def kept(fhir_service: TestClient, authority: Any, access_claims: Any, bearer: Any, root: Any) -> list[Json]:
    """The Observations of the example examination, as the service keeps them."""
    text = (root / "examples/ehr/fernwood-exam.json").read_bytes()
    token = bearer(authority.sign(access_claims(f"{WRITING} system/*.rs")))
    sent = {**token, "Content-Type": "application/json"}
    posted = fhir_service.post("/exams?map=fernwood-heart-form", content=text, headers=sent)
    assert posted.status_code == 200, posted.text
    found = fhir_service.get(f"{BASE}/Observation?_count=100", headers=token).json()
    return [entry["resource"] for entry in found["entry"]]


def of_category(kept: list[Json], code: str) -> Json:
    return next(one for one in kept if {c["code"] for g in one["category"] for c in g["coding"]} == {code})


@pytest.mark.parametrize(
    ("method", "path", "letter"),
    [
        ("GET", "/Observation", "s"),
        ("POST", "/Observation/_search", "s"),
        ("GET", "/Observation/{id}", "r"),
        ("GET", "/Observation/{id}/_history", "r"),
        ("GET", "/Observation/{id}/_history/1", "r"),
        ("POST", "/Observation", "c"),
        ("PUT", "/Observation/{id}", "u"),
        ("PUT", "/Observation?identifier=x|y", "u"),
    ],
)
def test_sm_6_each_interaction_needs_its_letter(
    by: Any, kept: list[Json], method: str, path: str, letter: str, outcome: Any
) -> None:
    """All letters but the one, and all types but this one, are refused before anything is looked at."""
    one = of_category(kept, "exam")
    path = path.replace("{id}", one["id"])
    body = one if method == "PUT" or path == "/Observation" else None
    headers = {"Content-Type": "application/x-www-form-urlencoded"} if path.endswith("_search") else {}
    others = "cruds".replace(letter, "")
    for scope in (f"system/Observation.{others}", f"system/DiagnosticReport.{letter}", "launch"):
        refused = by(scope, method, path, body if method != "GET" else None, **headers)
        assert outcome(refused) == (403, "forbidden", "auth-forbidden")
        assert 'error="insufficient_scope"' in refused.headers["www-authenticate"]
    needed = f"system/Observation.{letter}" + (" system/Observation.c" if "identifier" in path else "")
    assert by(needed, method, path, body if method != "GET" else None, **headers).status_code != 403


def test_sm_9_a_granular_scope_filters(by: Any, kept: list[Json]) -> None:
    found = by(EXAM_ONLY, "GET", "/Observation?_count=100").json()
    seen = {entry["resource"]["id"] for entry in found["entry"] if entry["search"]["mode"] == "match"}
    vital = of_category(kept, "vital-signs")
    wanted = {one["id"] for one in kept if "exam" in json.dumps(one["category"])}
    assert seen == wanted
    assert vital["id"] not in seen
    assert found.get("total", len(seen)) == len(seen)
    vitals = by(EXAM_ONLY.replace("|exam", "|vital-signs"), "GET", f"/Observation/{vital['id']}")
    assert vitals.status_code == 200


def test_sm_18_what_may_not_be_seen_is_as_if_it_were_not_there(by: Any, kept: list[Json]) -> None:
    """The same answer, byte for byte, for a hidden resource and for none."""
    hidden = of_category(kept, "vital-signs")["id"]
    nowhere = "00000000-0000-4000-8000-000000000000"
    for path in ("/Observation/{}", "/Observation/{}/_history", "/Observation/{}/_history/1"):
        one, none = (by(EXAM_ONLY, "GET", path.format(id_)) for id_ in (hidden, nowhere))
        assert one.status_code == none.status_code == 404
        assert one.content == none.content
    one, none = (by(EXAM_ONLY, "GET", f"/Observation?_id={id_}").json() for id_ in (hidden, nowhere))
    assert not one.get("entry")
    assert {k: v for k, v in one.items() if k not in ("id", "link", "meta")} == {
        k: v for k, v in none.items() if k not in ("id", "link", "meta")
    }


def test_sm_18_without_the_scope_unknown_and_known_are_alike(by: Any, kept: list[Json]) -> None:
    known, unknown = (
        by("system/Observation.s", "GET", f"/Observation/{id_}") for id_ in (kept[0]["id"], "nowhere")
    )
    assert known.status_code == unknown.status_code == 403
    assert known.content == unknown.content


def test_sm_9_an_update_may_neither_take_from_beyond_nor_put_beyond(by: Any, kept: list[Json]) -> None:
    scope = f"system/Observation.cru?category={CATEGORY}|exam"
    own, foreign = of_category(kept, "exam"), of_category(kept, "vital-signs")
    exam = [{"coding": [{"system": CATEGORY, "code": "exam"}]}]
    laboratory = [{"coding": [{"system": CATEGORY, "code": "laboratory"}]}]
    assert by(scope, "PUT", f"/Observation/{foreign['id']}", {**foreign, "category": exam}).status_code == 404
    assert by(scope, "PUT", f"/Observation/{own['id']}", {**own, "category": laboratory}).status_code == 403
    new = {name: value for name, value in own.items() if name not in ("id", "meta", "identifier")}
    assert by(scope, "POST", "/Observation", {**new, "category": laboratory}).status_code == 403
    assert by("system/*.rs", "GET", f"/Observation/{foreign['id']}").json()["meta"]["versionId"] == "1"
    assert by(scope, "POST", "/Observation", new).status_code == 201


@pytest.fixture
def bundle(root: Any) -> Json:
    """A coded examination as a transaction."""
    record = (root / "examples/ehr/fernwood-exam.json").read_bytes()
    result = process(record, root / "examples/informatician/fernwood-heart-form.yaml")
    found: Json = json.loads(fhirjson.write(result.bundle))
    return found


@pytest.mark.parametrize(
    "scope",
    [
        "system/*.rs",
        "system/Observation.cruds",
        WRITING.replace("DiagnosticReport.cu", "DiagnosticReport.c"),
        WRITING.replace("Provenance.cu", "Provenance.rs"),
        WRITING.replace("Observation.cu", f"Observation.cu?category={CATEGORY}|exam"),
        WRITING.replace("system/", "patient/"),
    ],
)
def test_sm_8_a_transaction_is_refused_whole_for_one_entry(by: Any, bundle: Json, scope: str) -> None:
    answer = by(scope, "POST", "", bundle)
    assert answer.status_code == 403
    assert by("system/*.s", "GET", "/Observation").json().get("total", 0) == 0
    assert not by("system/*.s", "GET", "/DiagnosticReport").json().get("entry")


def test_sm_8_a_transaction_with_every_scope_it_needs(by: Any, bundle: Json) -> None:
    assert by(WRITING, "POST", "", bundle).status_code == 200
    assert by("system/*.s", "GET", "/Observation").json()["entry"]


def batch(*urls: str) -> Json:
    return {
        "resourceType": "Bundle", "type": "batch",
        "entry": [{"request": {"method": "GET", "url": url}} for url in urls],
    }  # fmt: skip


def test_sm_8_a_batch_is_refused_entry_by_entry(by: Any, kept: list[Json]) -> None:
    id_ = kept[0]["id"]
    answer = by(
        "system/Observation.r", "POST", "", batch(f"Observation/{id_}", "DiagnosticReport", "Observation")
    )
    assert answer.status_code == 200
    statuses = [entry["response"]["status"].split()[0] for entry in answer.json()["entry"]]
    assert statuses == ["200", "403", "403"]
    assert all("resource" not in entry for entry in answer.json()["entry"][1:])


OUTWARD = [
    "Observation/../DiagnosticReport/{id}", "/DiagnosticReport/{id}", "/fhir/r4/DiagnosticReport/{id}",
    "http://localhost:8470/fhir/r4/DiagnosticReport/{id}", "http://localhost:8470/fhir/r5/Observation/{id}",
    "https://elsewhere.example/fhir/Observation/{id}", "observation/{id}",
    "Observation/{id}/../../DiagnosticReport",
    "Observation%2F..%2FDiagnosticReport", "Observation?_revinclude=Provenance:target",
    "Observation?_include=DiagnosticReport:result", "Observation/{id}/$everything",
    "Observation/_history", "_history",
    "?_type=DiagnosticReport", "", "Observation?_has:DiagnosticReport:result:status=final", "metadata",
    "Observation?_elements=id&_type=DiagnosticReport",
]  # fmt: skip


def test_no_address_in_a_bundle_leads_beyond_the_scope(by: Any, kept: list[Json]) -> None:
    report = by("system/*.s", "GET", "/DiagnosticReport").json()["entry"][0]["resource"]["id"]
    for url in OUTWARD:
        asked = url.replace("{id}", report)
        told = by("system/Observation.rs", "POST", "", batch(asked)).text
        assert "DiagnosticReport/" not in told.replace(asked, ""), url
        assert '"resourceType":"DiagnosticReport"' not in told, url
        assert '"resourceType":"Provenance"' not in told, url


def test_a_bundle_within_a_bundle_does_nothing(by: Any, bundle: Json) -> None:
    nested = {
        "resourceType": "Bundle", "type": "batch",
        "entry": [{"resource": bundle, "request": {"method": "POST", "url": "Bundle"}}],
    }  # fmt: skip
    answer = by("system/Observation.cruds", "POST", "", nested)
    statuses = [entry["response"]["status"][:3] for entry in answer.json().get("entry", [])]
    assert answer.status_code in (400, 422) or statuses == ["404"]
    assert not by("system/*.s", "GET", "/Observation").json().get("entry")


def test_an_entry_says_no_other_type_than_it_is(by: Any, bundle: Json) -> None:
    """A DiagnosticReport under the address of an Observation is refused, whatever the scopes."""
    report = next(
        e["resource"] for e in bundle["entry"] if e["resource"]["resourceType"] == "DiagnosticReport"
    )
    for kind in ("batch", "transaction"):
        entry = {"resource": report, "request": {"method": "POST", "url": "Observation"}}
        sent = {"resourceType": "Bundle", "type": kind, "entry": [entry]}
        by("system/Observation.cruds", "POST", "", sent)
        assert not by("system/*.s", "GET", "/DiagnosticReport").json().get("entry")
        assert not by("system/*.s", "GET", "/Observation").json().get("entry")


def test_sm_3_every_listed_scope_works(fhir_service: TestClient, by: Any, kept: list[Json]) -> None:
    """Each scope of the SMART configuration opens what its letters say, for a resource that is there."""
    told = fhir_service.get(f"{BASE}/.well-known/smart-configuration").json()
    reports = by("system/*.s", "GET", "/DiagnosticReport").json()["entry"]
    traces = by("system/*.s", "GET", "/Provenance").json()["entry"]
    ids = {e["resource"]["resourceType"]: e["resource"]["id"] for e in (*reports, *traces)}
    asked = 0
    for scope in told["scopes_supported"]:
        type_, does = scope.removeprefix("system/").partition("?")[0].split(".")
        letters = {"read": "rs"}.get(does, does)
        category = scope.rpartition("|")[2] if "?" in scope else "exam"
        id_ = ids.get(type_) or of_category(kept, category)["id"]
        interactions = {"r": ("GET", f"/{type_}/{id_}", None), "s": ("GET", f"/{type_}", None),
                        "c": ("POST", f"/{type_}", {"resourceType": type_}),
                        "u": ("PUT", f"/{type_}/{id_}", {"resourceType": type_, "id": id_})}  # fmt: skip
        for letter in letters:
            method, path, body = interactions[letter]
            answer = by(scope, method, path, body)
            # what is sent here is refused for what it is, not for the scope
            assert answer.status_code in ((200,) if body is None else (400, 422)), (scope, letter)
            asked += 1
    assert asked > 20
