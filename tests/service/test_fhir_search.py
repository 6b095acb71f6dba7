"""Search: what is found by which parameter, page by page, and what is refused.

Sources: FHIR R4 search.html; the numbered interoperability requirements (FR-24).
"""

from __future__ import annotations

from typing import Any

import pytest
from starlette.testclient import TestClient

from fhirgallop.conformance.validator import validate
from fhirgallop.outcome import has_errors
from fhirgallop.service.fhir import search as searching

BASE = "/fhir/r4/Observation"
FINDINGS = "https://fhirgallop.org/fhir/CodeSystem/findings"
VISITS, PATIENTS = "https://fernwood.example/visits", "https://fernwood.example/patients"
CATEGORY = "http://terminology.hl7.org/CodeSystem/observation-category"


def found(client: TestClient, query: Any, base: str = BASE) -> set[str]:
    """The words of what is found on the first page."""
    params = {**query, "_count": "200"} if isinstance(query, dict) else f"{query}&_count=200"
    answer = client.get(base, params=params)
    assert answer.status_code == 200, answer.text
    bundle = answer.json()
    assert not has_errors(validate(bundle))
    matches = [e["resource"] for e in bundle.get("entry", []) if e["search"]["mode"] == "match"]
    return {one["code"]["text"] if "code" in one else one["resourceType"] for one in matches}


def outcomes(answer: Any) -> list[str]:
    entries = answer.json().get("entry", [])
    return [
        issue["details"]["coding"][0]["code"]
        for entry in entries
        if entry["search"]["mode"] == "outcome"
        for issue in entry["resource"]["issue"]
    ]


@pytest.mark.parametrize(
    ("query", "expected"),
    [
        ({"code": "http://loinc.org|8867-4"}, {"Heart rate"}),
        ({"code": "8867-4"}, {"Heart rate"}),
        ({"code": "http://snomed.info/sct|364075005"}, {"Heart rate"}),
        ({"code": f"{FINDINGS}|heart-sound.s4"}, {"Fourth heart sound"}),
        ({"code": "https://fernwood.example/heart-form|vitals.hr"}, {"Heart rate"}),
        ({"code": "http://loinc.org|8867-4,http://loinc.org|8302-2"}, {"Heart rate", "Body height"}),
        ({"code": "|8867-4"}, set()),
        ({"code": "http://loinc.org|364075005"}, set()),
        ({"code": "http://loinc.org|8867-4", "category": "exam"}, set()),
        ({"category": f"{CATEGORY}|vital-signs", "code": "8867-4"}, {"Heart rate"}),
        ({"status": "entered-in-error"}, set()),
        ({"status": "http://hl7.org/fhir/observation-status|final", "code": "8867-4"}, {"Heart rate"}),
        ({"code": "8867-4", "status:not": "entered-in-error"}, {"Heart rate"}),
        ({"code": "8867-4", "status:not": "final,amended"}, set()),
        ({"code": "8867-4", "encounter:identifier": f"{VISITS}|V-8812"}, {"Heart rate"}),
        ({"code": "8867-4", "encounter:identifier": f"{VISITS}|V-1"}, set()),
        ({"code": "8867-4", "encounter": "V-8812"}, set()),
        ({"code": "8867-4", "subject:identifier": f"{PATIENTS}|F-20417"}, {"Heart rate"}),
        ({"code": "8867-4", "patient:identifier": "https://elsewhere.example|F-20417"}, set()),
        ({"code": "8867-4", "patient": "F-20417"}, set()),
        ({"code": "8867-4", "patient": "Patient/F-20417"}, set()),
    ],
)  # fmt: skip
def test_what_is_found(still: TestClient, query: dict[str, str], expected: set[str]) -> None:
    assert found(still, query) == expected


@pytest.mark.parametrize(
    ("date", "expected"),
    [
        ("2026-03-14", True),
        ("2026", True),
        ("2026-03-14T09:30:00+01:00", True),
        ("2026-03-14T08:30:00Z", True),
        ("2026-03-14T09:30:00Z", False),
        ("2026-03-13", False),
        ("ge2026-03-14", True),
        ("gt2026-03-14", False),
        ("gt2026-03-13", True),
        ("lt2026-03-14", False),
        ("le2026-03-14", True),
        ("sa2026-03-13", True),
        ("eb2026-03-15", True),
        ("ne2026-03-14", False),
        ("ap2026-03-01", True),
        ("2026-03-13,2026-03-14", True),
    ],
)
def test_by_date(still: TestClient, date: str, expected: bool) -> None:
    assert bool(found(still, {"code": "8867-4", "date": date})) is expected


def test_two_dates_make_a_span(still: TestClient) -> None:
    assert found(still, "code=8867-4&date=ge2026-03-01&date=lt2026-04-01")
    assert not found(still, "code=8867-4&date=ge2026-03-01&date=lt2026-03-10")


def test_absent_is_found_by_what_still_holds(still: TestClient) -> None:
    """A broader code is not written where the sign is absent, so that nobody finds it by that."""
    answer = still.get(BASE, params={"code": f"{FINDINGS}|heart-sound.ejection-click"}).json()
    (entry,) = answer["entry"]
    for coding in entry["resource"]["code"]["coding"]:
        again = still.get(BASE, params={"code": f"{coding['system']}|{coding['code']}"}).json()
        assert entry["resource"] in [one["resource"] for one in again["entry"]]


def test_an_id_is_never_taken_for_an_identifier(still: TestClient) -> None:
    answer = still.get(BASE, params={"patient": "F-20417"})
    assert answer.json().get("total") is None
    assert outcomes(answer) == ["search-by-address"]
    for value in ("F-20417", "|F-20417", "https://fernwood.example/patients|"):
        refused = still.get(BASE, params={"patient:identifier": value})
        assert refused.status_code == 400
        assert "system|value" in refused.text
        assert "F-20417" not in refused.text


def test_a_reference_by_address_is_found_by_it(client: TestClient, observation: dict[str, Any]) -> None:
    observation["subject"] = {
        "reference": "Patient/p-1",
        "identifier": {"system": "urn:oid:1.2", "value": "7"},
    }
    observation["encounter"] = {"reference": "https://ehr.example/fhir/Encounter/e-1"}
    headers = {"Content-Type": "application/fhir+json"}
    assert client.post(BASE, json=observation, headers=headers).status_code == 201
    assert found(client, {"patient": "p-1"}) == {"Heart rate"}
    assert found(client, {"subject": "Patient/p-1"}) == {"Heart rate"}
    assert found(client, {"patient:identifier": "urn:oid:1.2|7"}) == {"Heart rate"}
    assert found(client, {"encounter": "https://ehr.example/fhir/Encounter/e-1"}) == {"Heart rate"}
    assert found(client, {"patient": "7"}) == set()
    assert found(client, {"encounter": "e-1"}) == set()


def test_by_identifier(client: TestClient, observation: dict[str, Any]) -> None:
    headers = {"Content-Type": "application/fhir+json"}
    client.post(BASE, json=observation, headers=headers)
    assert found(client, {"identifier": "https://fernwood.example/results|R-1"}) == {"Heart rate"}
    assert found(client, {"identifier": "R-1"}) == {"Heart rate"}
    assert found(client, {"identifier": "|R-1"}) == set()
    assert found(client, {"identifier": "https://fernwood.example/results|R-2"}) == set()
    assert client.get(BASE, params={"identifier": "https://fernwood.example/results|"}).status_code == 400


def test_our_own_identities_are_identifiers(still: TestClient) -> None:
    every = still.get(f"{BASE}?_count=200").json()["entry"]
    for entry in every[:3]:
        identifier = entry["resource"]["identifier"][0]
        query = {"identifier": f"{identifier['system']}|{identifier['value']}"}
        assert found(still, query) == {entry["resource"]["code"]["text"]}
        assert found(still, {"identifier": identifier["value"]}) == {entry["resource"]["code"]["text"]}
        assert found(still, {"_id": f"{entry['resource']['id']},x"}) == {entry["resource"]["code"]["text"]}


def test_a_given_id_is_no_identity(client: TestClient, observation: dict[str, Any]) -> None:
    headers = {"Content-Type": "application/fhir+json"}
    made = client.post(BASE, json=observation, headers=headers).json()
    assert found(client, {"identifier": f"urn:ietf:rfc:3986|urn:uuid:{made['id']}"}) == set()


def test_provenance(still: TestClient, of_patient: dict[str, str]) -> None:
    base = "/fhir/r4/Provenance"
    assert found(still, of_patient, base) == {"Provenance"}
    (entry,) = still.get(base).json()["entry"]
    tag = entry["resource"]["meta"]["tag"][0]
    assert found(still, {"_tag": f"{tag['system']}|{tag['code']}"}, base) == {"Provenance"}
    assert found(still, {"_tag": f"https://elsewhere.example|{tag['code']}"}, base) == set()
    assert found(still, {"recorded": "2026-12-01"}, base) == {"Provenance"}
    assert found(still, {"recorded": "lt2026-12-01"}, base) == set()
    assert still.get(base, params={"patient": "F-20417"}).status_code == 400


def test_by_time_of_change(examined: TestClient, example: Any) -> None:
    before = examined.get(f"{BASE}?_count=1&_sort=-_lastUpdated").json()["entry"][0]["resource"]
    moment = before["meta"]["lastUpdated"]
    assert not found(examined, {"_lastUpdated": f"gt{moment}"})
    changed = example(heart={"s4": "no"})
    examined.post("/exams", params={"map": "fernwood-heart-form"}, json=changed)
    assert "Fourth heart sound" in found(examined, {"_lastUpdated": f"gt{moment}"})
    assert "Heart rate" not in found(examined, {"_lastUpdated": f"gt{moment}"})


@pytest.mark.parametrize("order", ["date", "-date", "_lastUpdated", "-_lastUpdated"])
@pytest.mark.parametrize("beside", ["", "&category=exam", "&code:not=x"])
def test_pages_hold_everything_once(examined: TestClient, example: Any, order: str, beside: str) -> None:
    for day in ("15.03.2026", "16.03.2026"):
        record = example(exam={"number": f"E-{day}", "day": day})
        examined.post("/exams", params={"map": "fernwood-heart-form"}, json=record)
    whole = examined.get(f"{BASE}?_total=accurate&_count=200&_sort={order}{beside}").json()
    expected = [entry["resource"]["id"] for entry in whole["entry"]]
    assert whole["total"] == len(expected) == len(set(expected)) > 60
    seen: list[str] = []
    url = f"{BASE}?_count=7&_sort={order}{beside}"
    while url:
        page = examined.get(url).json()
        assert len(page.get("entry", [])) <= 7
        seen += [entry["resource"]["id"] for entry in page["entry"]]
        url = next((link["url"] for link in page["link"] if link["relation"] == "next"), "")
    assert seen == expected
    dates = [entry["resource"]["effectiveDateTime"] for entry in whole["entry"]]
    if order.endswith("date"):
        assert dates == sorted(dates, reverse=order.startswith("-"))


def test_a_page_looks_at_a_bounded_number(still: TestClient, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(searching, "MOST_LOOKED_AT", 10)
    monkeypatch.setattr(searching, "_SLICE", 5)
    url, pages, seen = f"{BASE}?category=exam&_count=200", 0, 0
    while url:
        page = still.get(url).json()
        pages += 1
        seen += len(page.get("entry", []))
        url = next((link["url"] for link in page["link"] if link["relation"] == "next"), "")
    assert pages == 4
    assert seen == len([1 for one in _all(still) if one["category"][0]["coding"][0]["code"] == "exam"])


def _all(client: TestClient) -> list[dict[str, Any]]:
    return [entry["resource"] for entry in client.get(f"{BASE}?_count=200").json()["entry"]]


def test_totals(still: TestClient, of_patient: dict[str, str]) -> None:
    assert still.get(BASE, params={**of_patient, "_count": "1"}).json()["total"] == 34
    assert "total" not in still.get(BASE, params={**of_patient, "_total": "none"}).json()
    assert "total" not in still.get(BASE, params={"category": "exam"}).json()
    count_only = still.get(BASE, params={"category": "exam", "_count": "0"}).json()
    assert count_only["total"] > 10
    assert "entry" not in count_only


def test_a_page_has_a_limit(still: TestClient) -> None:
    bundle = still.get(f"{BASE}?_count=5000").json()
    (link,) = [one for one in bundle["link"] if one["relation"] == "self"]
    assert "_count=200" in link["url"]


def test_search_by_form_finds_the_same(still: TestClient, of_patient: dict[str, str]) -> None:
    query = {**of_patient, "code": "http://loinc.org|8867-4"}
    by_address = still.get(BASE, params=query).json()
    by_form = still.post(f"{BASE}/_search", data=query).json()
    mixed = still.post(f"{BASE}/_search?code=http://loinc.org|8867-4", data=of_patient).json()
    assert by_form["entry"] == by_address["entry"] == mixed["entry"]
    wrong = still.post(f"{BASE}/_search", json=query)
    assert wrong.status_code == 415
    assert still.post(f"{BASE}/_search").status_code == 200


@pytest.mark.parametrize("query", ["Code=8867-4", "_include=Observation:subject", "_summary=true", "code=",
                                   "_sort=status", "value-quantity=gt5", "_elements=code"])  # fmt: skip
def test_unknown_parameters_are_named_or_refused(still: TestClient, query: str) -> None:
    lenient = still.get(f"{BASE}?{query}&_count=1")
    assert lenient.status_code == 200
    assert outcomes(lenient) == ["search-unknown-parameter"]
    (link,) = [one["url"] for one in lenient.json()["link"] if one["relation"] == "self"]
    assert query.partition("=")[0] not in link
    asked = still.get(f"{BASE}?{query}&_count=1", headers={"Prefer": "handling=lenient"})
    assert asked.status_code == 200
    strict = still.get(f"{BASE}?{query}&_count=1", headers={"Prefer": "handling=strict"})
    assert strict.status_code == 400


@pytest.mark.parametrize(
    "query",
    [
        "code:in=x", "patient:Patient=1", "date:missing=true", "identifier:of-type=a|b|c",  # modifiers
        "date=yesterday", "date=xx2026", "date=2026-13-01", "date=ge", "_lastUpdated=x",
        "_count=-1", "_count=x", "_total=maybe", "_cursor=x", "_cursor=Li4vLi4v",
        "&".join(["code=1"] * 60), "code=" + "1," * 150, "code=" + "1" * 5000,
    ],
)  # fmt: skip
def test_what_cannot_be_meant_is_refused_whatever_is_preferred(still: TestClient, query: str) -> None:
    answer = still.get(f"{BASE}?{query}", headers={"Prefer": "handling=lenient"})
    assert answer.status_code == 400
    assert answer.json()["resourceType"] == "OperationOutcome"


def test_a_cursor_belongs_to_its_order(still: TestClient) -> None:
    page = still.get(f"{BASE}?_count=1&_sort=date").json()
    url = next(link["url"] for link in page["link"] if link["relation"] == "next")
    assert still.get(url).status_code == 200
    assert still.get(url.replace("_sort=date", "_sort=-date")).status_code == 400


@pytest.mark.parametrize(
    "value", ["' or '1'='1", '"; drop table resources; --', "%' or 1=1", "\\', \\|", "\x00"]
)
def test_what_looks_like_sql_is_text(still: TestClient, value: str) -> None:
    for name in ("_id", "code", "identifier", "category", "status", "patient", "encounter"):
        answer = still.get(BASE, params={name: value})
        assert answer.status_code == 200
        assert not [e for e in answer.json().get("entry", []) if e["search"]["mode"] == "match"]
    assert len(_all(still)) == 34


def test_commas_and_bars_can_be_escaped(client: TestClient, observation: dict[str, Any]) -> None:
    observation["identifier"] = [{"system": "https://a.example", "value": "R,1|2\\3"}]
    client.post(BASE, json=observation, headers={"Content-Type": "application/fhir+json"})
    assert found(client, {"identifier": "https://a.example|R\\,1\\|2\\\\3"}) == {"Heart rate"}
    assert found(client, {"identifier": "https://a.example|R,1|2\\3"}) == set()
