"""The capability statement is true to the routes; definitions are read, searched and conform."""

from __future__ import annotations

import re
from typing import Any

import pytest
from fastapi import FastAPI
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.conformance.validator import validate
from fhirgallop.mapping.reading import read_map
from fhirgallop.outcome import has_errors
from fhirgallop.service.app import create_app
from fhirgallop.service.fhir.map_concepts import concept_map, map_id

EDITIONS = {"r4": ("R4", "4.0.1"), "r4b": ("R4B", "4.3.0"), "r5": ("R5", "5.0.0")}
PUBLISHED = ("CodeSystem", "ConceptMap", "StructureDefinition", "ValueSet")
FORM_MAP = "https://fhirgallop.org/fhir/ConceptMap/fernwood-heart-form"


@pytest.fixture(params=EDITIONS)
def edition(request: pytest.FixtureRequest) -> str:
    return str(request.param)


@pytest.fixture
def statement(still: TestClient, edition: str) -> dict[str, Any]:
    told: dict[str, Any] = still.get(f"/fhir/{edition}/metadata").json()
    return told


def of_type(statement: dict[str, Any], type_: str) -> dict[str, Any]:
    found: dict[str, Any] = next(r for r in statement["rest"][0]["resource"] if r["type"] == type_)
    return found


def test_statements_conform(still: TestClient, edition: str) -> None:
    for mode, kind in (("full", "CapabilityStatement"), ("terminology", "TerminologyCapabilities")):
        answer = still.get(f"/fhir/{edition}/metadata", params={"mode": mode})
        assert answer.json()["resourceType"] == kind
        assert not has_errors(validate(answer.content, EDITIONS[edition][0]))
    assert still.get(f"/fhir/{edition}/metadata?mode=x").status_code == 400


def test_the_statement_has_a_tag(still: TestClient, edition: str) -> None:
    answer = still.get(f"/fhir/{edition}/metadata")
    assert re.fullmatch(r'W/"[0-9a-f]{16}"', answer.headers["etag"])
    again = still.get(f"/fhir/{edition}/metadata", headers={"If-None-Match": answer.headers["etag"]})
    assert (again.status_code, again.content) == (304, b"")
    other = still.get(f"/fhir/{edition}/metadata?mode=terminology")
    assert other.headers["etag"] != answer.headers["etag"]


def test_the_statement_is_of_its_edition(statement: dict[str, Any], edition: str) -> None:
    assert statement["fhirVersion"] == EDITIONS[edition][1]
    assert statement["implementation"]["url"].endswith(f"/fhir/{edition}")


def _routes(application: FastAPI) -> set[tuple[str, str]]:
    described = application.openapi()["paths"]
    return {
        (method.upper(), path)
        for path, methods in described.items()
        for method in methods
        if path.startswith("/fhir/")
    }


def _declared(statement: dict[str, Any]) -> set[tuple[str, str]]:
    """The addresses that a statement promises, as the routes write them."""
    rest = statement["rest"][0]
    base = "/fhir/{edition}"
    found = {("GET", f"{base}/metadata"), ("GET", f"{base}/.well-known/smart-configuration")}
    if {"code": "transaction"} in rest["interaction"]:
        found.add(("POST", base))
    found |= {("POST", f"{base}/${one['name']}") for one in rest["operation"]}
    by_interaction = {
        "read": [("GET", "/{fhir_id}")],
        "vread": [("GET", "/{fhir_id}/_history/{version_id}")],
        "history-instance": [("GET", "/{fhir_id}/_history")],
        "create": [("POST", "")],
        "update": [("PUT", "/{fhir_id}"), ("PUT", "")],
        "search-type": [("GET", ""), ("POST", "/_search")],
    }
    for resource in rest["resource"]:
        kept = resource.get("versioning") == "versioned"
        place = f"{base}/{'{resource_type}' if kept else resource['type']}"
        for interaction in resource.get("interaction", ()):
            found |= {(method, place + tail) for method, tail in by_interaction[interaction["code"]]}
        for operation in resource["operation"]:
            name = f"${operation['name']}"
            if operation["name"] == "validate":
                found |= {("POST", f"{base}/{{resource_type}}{tail}/{name}") for tail in ("", "/{fhir_id}")}
            elif operation["name"] == "extract":
                found.add(("POST", f"{place}/{name}"))
            else:
                tails = ("",) if operation["name"] == "lookup" else ("", "/{fhir_id}")
                found |= {(m, f"{place}{tail}/{name}") for tail in tails for m in ("GET", "POST")}
    return found


def test_the_statement_and_the_routes_say_the_same(application: FastAPI, statement: dict[str, Any]) -> None:
    assert _declared(statement) == _routes(application)


def test_every_declared_search_parameter_is_served(
    still: TestClient, statement: dict[str, Any], edition: str
) -> None:
    value = {"token": "x|y", "reference": "x", "date": "2026", "uri": "x", "string": "x"}
    for resource in statement["rest"][0]["resource"]:
        for parameter in resource.get("searchParam", ()):
            name = parameter["name"]
            by_id = resource["type"] == "Provenance" and parameter["type"] == "reference"
            query = {f"{name}:identifier": "x|y"} if by_id else {name: value[parameter["type"]]}
            answer = still.get(
                f"/fhir/{edition}/{resource['type']}", params=query, headers={"Prefer": "handling=strict"}
            )
            assert answer.status_code == 200, (resource["type"], name, answer.text)


def test_authorisation_is_said_where_it_is_on(application: FastAPI) -> None:
    client = TestClient(application, base_url="http://localhost:8470")
    off = client.get("/fhir/r4/metadata").json()["rest"][0]["security"]
    assert "service" not in off
    application.state.gate = type("Closed", (), {"closed": True, "close": lambda _self: None})()
    on = client.get("/fhir/r4/metadata").json()["rest"][0]["security"]
    assert on["service"][0]["coding"][0]["code"] == "SMART-on-FHIR"


@pytest.mark.parametrize("type_", PUBLISHED)
def test_definitions_conform_and_can_be_read(still: TestClient, edition: str, type_: str) -> None:
    seen = 0
    url = f"/fhir/{edition}/{type_}?_count=100"
    while url:
        bundle = still.get(url).json()
        for entry in bundle["entry"]:
            assert not has_errors(validate(entry["resource"], EDITIONS[edition][0])), entry["fullUrl"]
            seen += 1
        url = next((link["url"] for link in bundle["link"] if link["relation"] == "next"), "")
    assert seen == bundle["total"] > 1
    last = bundle["entry"][-1]
    answer = still.get(last["fullUrl"])
    assert answer.json() == last["resource"]
    same = still.get(last["fullUrl"], headers={"If-None-Match": answer.headers["etag"]})
    assert same.status_code == 304


@pytest.mark.parametrize(
    ("query", "ids"),
    [
        ("CodeSystem?url=https://fhirgallop.org/fhir/CodeSystem/findings", ["findings"]),
        ("CodeSystem?_id=findings,qualifiers&status=active", ["findings", "qualifiers"]),
        ("CodeSystem?name=FIND", ["findings"]),
        ("CodeSystem?version=9.9", []),
        ("ValueSet?title=Values: Body position", ["axis-posture"]),
        (
            "StructureDefinition?url=https://fhirgallop.org/fhir/StructureDefinition/exam-panel",
            ["exam-panel"],
        ),
    ],
)
def test_definitions_are_searched(still: TestClient, query: str, ids: list[str]) -> None:
    bundle = still.get(f"/fhir/r4/{query}").json()
    assert [entry["resource"]["id"] for entry in bundle.get("entry", [])] == ids
    assert bundle["total"] == len(ids)
    type_, _, rest = query.partition("?")
    by_form = still.post(
        f"/fhir/r4/{type_}/_search",
        content=rest,
        headers={"Content-Type": "application/x-www-form-urlencoded"},
    )
    assert by_form.json() == bundle


def test_what_is_no_definition(still: TestClient) -> None:
    assert still.get("/fhir/r4/CodeSystem/nobody").status_code == 404
    strict = still.get("/fhir/r4/CodeSystem?code=x", headers={"Prefer": "handling=strict"})
    assert strict.status_code == 400
    lenient = still.get("/fhir/r4/CodeSystem?code=x").json()
    assert lenient["entry"][-1]["search"]["mode"] == "outcome"


def test_every_template_map_is_a_concept_map(still: TestClient, edition: str) -> None:
    bundle = still.get(f"/fhir/{edition}/ConceptMap", params={"url": FORM_MAP}).json()
    (entry,) = bundle["entry"]
    resource = entry["resource"]
    assert resource["version"] == "2026.1"
    groups = {group["target"].rpartition("/")[2]: group for group in resource["group"]}
    fields = {element["code"]: element for element in groups["findings"]["element"]}
    relation = "relationship" if edition == "r5" else "equivalence"
    assert fields["vitals.hr"]["target"] == [{"code": "vital.heart-rate", relation: "equivalent"}]
    # a box with two numbers says more than either
    pressure = fields["vitals.bp"]["target"][1]
    assert pressure[relation] == ("source-is-broader-than-target" if edition == "r5" else "narrower")
    assert pressure["comment"]
    # a line that says the side too maps to a finding that is wider than it
    bruit = fields["neck.bruit_left"]["target"][0]
    assert bruit[relation] == ("source-is-narrower-than-target" if edition == "r5" else "wider")


MAP = """
template-map: 1
name: small-form
version: "{version}"
title: Small form
record:
  patient: {{field: p, system: "https://small.example/p"}}
  identifier: {{field: e, system: "https://small.example/e"}}
  time: {{field: t}}
blank-means: not-recorded
unknown-values: {unknown}
lines:
  - finding: heart-sound.s4
    field: s4
    choice: {{"yes": present, "no": absent, "-": not-recorded}}
  - finding: heart-sound.s3
    field: s3
    choice: {{"yes": present, "no": absent}}
"""


@pytest.mark.parametrize("name", ["R4", "R5"])
def test_lint_of_concept_maps(name: str) -> None:
    """TX-6 (a comment where the source is broader), TX-8 (a group without a target), TX-5 (unmapped)."""
    template, issues = read_map(MAP.format(version="1", unknown="keep-as-text").encode(), name="small.yaml")
    assert template is not None, issues
    made = concept_map(template, name)
    for group in made["group"]:
        assert group["target"]
        for element in group["element"]:
            for target in element.get("target", ()):
                if target.get("equivalence") in ("narrower", "inexact"):
                    assert target["comment"]
    answers = next(group for group in made["group"] if group["target"].endswith("qualifiers"))
    assert answers["unmapped"]["mode"] == ("use-source-code" if name == "R5" else "provided")
    yes = next(element for element in answers["element"] if element["code"] == "yes")
    assert len(yes["target"]) == 2
    assert not has_errors(validate(made, name))
    refusing, _ = read_map(MAP.format(version="1", unknown="refuse").encode(), name="small.yaml")
    assert refusing is not None
    assert not any("unmapped" in group for group in concept_map(refusing, name)["group"])


def test_old_versions_of_a_map_stay(tmp_path: Any) -> None:
    maps = tmp_path / "maps"
    maps.mkdir()
    database = f"sqlite:///{tmp_path / 'maps.sqlite3'}"
    for version in ("1", "2"):
        (maps / "small.yaml").write_text(MAP.format(version=version, unknown="refuse"))
        app = create_app(settings.load(maps=maps, database=database))
    with TestClient(app, base_url="http://localhost:8470") as client:
        url = "https://fhirgallop.org/fhir/ConceptMap/small-form"
        found = client.get("/fhir/r4/ConceptMap", params={"url": url}).json()["entry"]
        assert [entry["resource"]["version"] for entry in found] == ["2", "1"]
        assert found[1]["resource"]["id"] == map_id("small-form", "1")
        old = client.get("/fhir/r4/ConceptMap", params={"url": url, "version": "1"}).json()
        assert old["total"] == 1
        query = {"code": "s4", "system": "https://fhirgallop.org/fhir/template-map/small-form"}
        for version, named in (("", "|2"), ("1", "|1")):
            asked = {"url": url, **query, **({"conceptMapVersion": version} if version else {})}
            told = client.get("/fhir/r4/ConceptMap/$translate", params=asked).json()
            parts = told["parameter"][1]["part"]
            assert next(p["valueUri"] for p in parts if p["name"] == "source").endswith(named)
