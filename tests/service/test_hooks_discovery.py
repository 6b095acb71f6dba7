"""CDS Hooks 2.0.1, discovery and prefetch templates: each test is named after the requirement it holds."""

from __future__ import annotations

import re
from typing import Any

import pytest
from starlette.testclient import TestClient

from fhirgallop import assets
from fhirgallop.cards import discovery
from fhirgallop.cards.discovery import EXAM_DRAFT, SERVICES

# The tokens of CDS Hooks 2.0.1, and the search parameters of FHIR R4 that the templates use (each is in the
# R4 definition of its resource).
TOKENS = {"context.patientId", "context.userId", "context.encounterId", "userPractitionerId",
          "userPractitionerRoleId", "userPatientId", "userRelatedPersonId"}  # fmt: skip
PARAMETERS = {
    "Observation": {"patient", "category", "code", "date"},
    "DiagnosticReport": {"patient", "category", "code", "date"},
    "Condition": {"patient", "category", "code"},
    "Procedure": {"patient", "code", "date"},
    "Device": {"patient"},
}
TEMPLATES = [(service.id, key, wanted) for service in SERVICES for key, wanted in service.prefetch.items()]
each_template = pytest.mark.parametrize(("service", "key", "wanted"), TEMPLATES)


@pytest.fixture
def listed(hooked: TestClient) -> list[dict[str, Any]]:
    found: list[dict[str, Any]] = hooked.get("/cds-services").json()["services"]
    return found


def test_ch_6_discovery_is_always_there(hooked: TestClient) -> None:
    answer = hooked.get("/cds-services")
    assert answer.status_code == 200
    assert answer.headers["content-type"] == "application/json"
    assert {one["hook"] for one in answer.json()["services"]} == {
        "patient-view", "encounter-discharge", EXAM_DRAFT,
    }  # fmt: skip


def test_ch_7_no_services_is_an_empty_list(monkeypatch: pytest.MonkeyPatch, hooked: TestClient) -> None:
    monkeypatch.setattr(discovery, "SERVICES", ())
    answer = hooked.get("/cds-services")
    assert (answer.status_code, answer.json()) == (200, {"services": []})


def test_ch_8_each_service_names_hook_id_title_description(listed: list[dict[str, Any]]) -> None:
    for one in listed:
        assert all(
            isinstance(one[name], str) and one[name] for name in ("hook", "id", "title", "description")
        )
    assert len({one["id"] for one in listed}) == len(listed)


def test_ch_9_each_id_is_an_address(hooked: TestClient, listed: list[dict[str, Any]]) -> None:
    for one in listed:
        answer = hooked.post(f"/cds-services/{one['id']}", json={})
        assert answer.status_code == 400, "the service is there, and judges the body"
    assert hooked.post("/cds-services/another", json={}).status_code == 404


def test_ch_10_prefetch_and_usage_are_as_described(listed: list[dict[str, Any]]) -> None:
    for one in listed:
        assert all(isinstance(key, str) and isinstance(query, str) for key, query in one["prefetch"].items())
        assert "Send the prefetch" in one["usageRequirements"]
        assert "412" in one["usageRequirements"]


def test_ch_12_versions_for_clients_of_the_next_edition(listed: list[dict[str, Any]], root: Any) -> None:
    semver = re.compile(r"\d+\.\d+\.\d+")
    assert all(semver.fullmatch(one["version"]) for one in listed)
    versions = {one["hook"]: one["hookVersion"] for one in listed}
    assert versions["patient-view"] == versions["encounter-discharge"] == "1.0"
    page = (root / f"profiles/fhirgallop/hooks/{EXAM_DRAFT}.md").read_text("utf-8")
    assert f"| hookVersion | {versions[EXAM_DRAFT]} |" in page


@each_template
def test_ch_14_templates_are_reads_or_searches_by_type(service: str, key: str, wanted: Any) -> None:
    if wanted.is_read:
        assert re.fullmatch(r"[A-Z][A-Za-z]+/\{\{[a-zA-Z.]+\}\}", wanted.query)
        return
    kind, _, query = wanted.query.partition("?")
    assert kind == wanted.type
    for part in query.split("&"):
        name, _, value = part.partition("=")
        assert value
        modifier = name.partition(":")[1]
        assert not modifier, "a token is compared by equality"
        assert name in {*PARAMETERS[kind], "_count", "_sort"}
        if name == "date":
            assert value[:2] in ("eq", "lt", "gt", "ge", "le")
        if name == "_count":
            assert 0 < int(value) <= 1000


@each_template
def test_ch_15_templates_use_the_tokens_of_this_edition(service: str, key: str, wanted: Any) -> None:
    assert set(re.findall(r"\{\{(.*?)\}\}", wanted.query)) <= TOKENS
    assert wanted.query.count("{{") == wanted.query.count("}}") == 1


@each_template
def test_ch_16_no_template_depends_on_another(service: str, key: str, wanted: Any) -> None:
    assert not re.search(r"[%|()]|resolve|ofType|today", wanted.query)


@each_template
def test_ch_17_search_parameters_are_widely_served(service: str, key: str, wanted: Any) -> None:
    if not wanted.is_read:
        names = {part.partition("=")[0] for part in wanted.query.partition("?")[2].split("&")}
        assert "patient" in names
        assert names <= {"patient", "category", "code", "date", "_sort", "_count"}


@each_template
def test_ch_18_sorting_is_fhir_search_syntax(service: str, key: str, wanted: Any) -> None:
    assert "sort:" not in wanted.query
    for value in re.findall(r"_sort=([^&]*)", wanted.query):
        assert re.fullmatch(r"-?[a-z-]+", value)


def test_ch_21_no_ordering_hooks() -> None:
    assert not {service.hook for service in SERVICES} & {"order-select", "order-sign", "order-dispatch"}


def test_ch_22_our_own_hook_is_named_by_reverse_domain() -> None:
    standard = {"patient-view", "encounter-discharge"}
    own = {service.hook for service in SERVICES} - standard
    assert own
    assert all(re.fullmatch(r"[a-z]+(\.[a-z0-9]+)+\.[a-z]+-[a-z]+", name) for name in own)


def test_ch_23_our_own_hook_has_a_definition_page(hooked: TestClient) -> None:
    answer = hooked.get(f"/hooks/{EXAM_DRAFT}")
    assert answer.status_code == 200
    assert answer.headers["content-type"].startswith("text/markdown")
    page = answer.text
    for part in ("specificationVersion", "hookVersion", "hookMaturity", "## Workflow", "## Context",
                 "## Examples", "## Change Log"):  # fmt: skip
        assert part in page
    head = "| Field | Optionality | Prefetch Token | Type | Description |"
    assert head in page
    rows = page.partition(head)[2].partition("\n\n")[0].splitlines()[2:]
    assert [re.match(r"\| `(\w+)`", row)[1] for row in rows] == [  # type: ignore[index]
        "userId", "patientId", "encounterId", "draftObservations", "record", "map",
    ]  # fmt: skip


def test_ch_25_a_change_of_the_hook_is_a_change_of_its_version(root: Any) -> None:
    """The page's newest entry of the change log is the version that discovery tells."""
    page = assets.path("profiles", "fhirgallop", "hooks", f"{EXAM_DRAFT}.md").read_text("utf-8")
    newest = re.findall(r"^\| (\d+\.\d+\.\d+) \|", page.partition("## Change Log")[2], re.MULTILINE)[0]
    (service,) = [one for one in SERVICES if one.hook == EXAM_DRAFT]
    assert service.hook_version == newest


def test_the_examples_of_the_definition_page_are_calls(hooked: TestClient, hook_call: Any) -> None:
    """The coded example is answered as it stands, but for its day and patient."""
    import json  # noqa: PLC0415

    page = hooked.get(f"/hooks/{EXAM_DRAFT}").text
    _, coded = (json.loads(text) for text in re.findall(r"```json\n(.*?)```", page, re.DOTALL))
    text = json.dumps(coded).replace("2026-12-01T08:30:00Z", "2026-03-14T08:30:00Z")
    answer = hooked.post(
        "/cds-services/exam-review-draft", content=text, headers={"Content-Type": "application/json"}
    )
    assert answer.status_code == 200, answer.text
    assert answer.json()["cards"][0]["suggestions"][0]["label"] == "Record today's rhythm"
