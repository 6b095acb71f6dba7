"""What the FHIR addresses answer, held against what others publish.

Sources: fhir.resources (PyPI), whose classes are made from the R4B and R5 definitions; the JSON examples of
FHIR R4 operations.html are repeated from memory where a comment says so; RFC 9110 for dates and entity tags.
"""

from __future__ import annotations

from collections.abc import Iterator
from datetime import UTC, datetime
from email.utils import parsedate_to_datetime
from pathlib import Path
from typing import Any

import pytest
from fhir.resources import get_fhir_model_class
from fhir.resources.R4B import get_fhir_model_class as of_r4b
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.service.app import create_app
from fhirgallop.service.fhir import dates

MODELS = {"r4": of_r4b, "r4b": of_r4b, "r5": get_fhir_model_class}
FHIR = {"Content-Type": "application/fhir+json"}


@pytest.fixture(scope="module")
def service(tmp_path_factory: pytest.TempPathFactory, root: Path) -> Iterator[TestClient]:
    folder = tmp_path_factory.mktemp("fhir")
    chosen = settings.load(
        maps=root / "examples/informatician", database=f"sqlite:///{folder / 'fhir.sqlite3'}"
    )
    with TestClient(create_app(chosen), base_url="http://localhost") as client:
        record = (root / "examples/ehr/fernwood-exam.json").read_bytes()
        for edition in ("R4", "R4B", "R5"):
            answer = client.post(
                f"/exams?map=fernwood-heart-form&edition={edition}",
                content=record,
                headers={"Content-Type": "application/json"},
            )
            assert answer.status_code == 200
        yield client


def parsed(answer: Any, edition: str) -> Any:
    """The answer as an object of the library; it refuses what its classes do not know."""
    return MODELS[edition](answer.json()["resourceType"]).model_validate_json(answer.content)


@pytest.mark.parametrize("edition", MODELS)
def test_others_read_what_is_answered(service: TestClient, edition: str) -> None:
    base = f"/fhir/{edition}"
    for query in ("Observation?_count=200", "DiagnosticReport", "Provenance", "ValueSet?_count=5",
                  "ConceptMap", "CodeSystem", "Observation?nonsense=1", "Observation/nobody"):  # fmt: skip
        answer = service.get(f"{base}/{query}")
        found = parsed(answer, edition)
        if "_count=200" in query:
            assert len(found.entry) == 34
            fhir_id = found.entry[0].resource.id
    for tail in ("", "/_history", "/_history/1"):
        parsed(service.get(f"{base}/Observation/{fhir_id}{tail}"), edition)
    for mode in ("full", "terminology"):
        parsed(service.get(f"{base}/metadata?mode={mode}"), edition)
    expand = "ValueSet/axis-posture/$expand"
    lookup = "CodeSystem/$lookup?system=http://snomed.info/sct&code=364075005"
    for operation in (expand, lookup):
        parsed(service.get(f"{base}/{operation}"), edition)


def test_what_others_write_is_taken(service: TestClient) -> None:
    """An Observation made by the library, and its decimals, come back as it made them."""
    model = of_r4b("Observation")
    made = model(
        status="final",
        code={"coding": [{"system": "http://loinc.org", "code": "29463-7", "display": "Body weight"}]},
        category=[{"coding": [{"system": "http://terminology.hl7.org/CodeSystem/observation-category",
                               "code": "vital-signs"}]}],
        subject={"reference": "Patient/made-elsewhere"},
        effectiveDateTime="2026-03-14",
        valueQuantity={"value": 72.5, "unit": "kg", "system": "http://unitsofmeasure.org", "code": "kg"},
    )  # fmt: skip
    answer = service.post("/fhir/r4b/Observation", content=made.model_dump_json(), headers=FHIR)
    assert answer.status_code == 201, answer.text
    back = parsed(answer, "r4b")
    assert (back.valueQuantity, back.code, back.subject) == (made.valueQuantity, made.code, made.subject)


# Source: the narrative of the operation ValueSet-validate-code and ConceptMap-translate in R4 (from memory):
# GET with simple parameters, POST with a Parameters resource; "result" is a boolean that always stands.
@pytest.mark.parametrize("edition", MODELS)
def test_results_of_operations_have_their_shape(service: TestClient, edition: str) -> None:
    codes = "https://fhirgallop.org/fhir/CodeSystem/findings"
    code = "sourceCode" if edition == "r5" else "code"
    translated = service.get(f"/fhir/{edition}/ConceptMap/$translate?{code}=murmur&system={codes}")
    validated = service.get(f"/fhir/{edition}/CodeSystem/$validate-code?url={codes}&code=murmur")
    for answer in (translated, validated):
        found = parsed(answer, edition)
        (result,) = [one for one in found.parameter if one.name == "result"]
        assert result.valueBoolean is True


def test_http_dates_and_tags_are_read_by_others(service: TestClient) -> None:
    (entry, *_) = service.get("/fhir/r4/Observation").json()["entry"]
    answer = service.get(entry["fullUrl"])
    moment = parsedate_to_datetime(answer.headers["last-modified"])
    updated = datetime.fromisoformat(entry["resource"]["meta"]["lastUpdated"])
    assert moment == updated.replace(microsecond=0)
    assert answer.headers["etag"] == f'W/"{entry["resource"]["meta"]["versionId"]}"'


# Source: FHIR R4 search.html, "date" (the table of prefixes and the examples of implied ranges).
@pytest.mark.parametrize(
    ("text", "first", "last"),
    [
        ("2013-01-14", "2013-01-14T00:00:00.000", "2013-01-14T23:59:59.999"),
        ("2013-01-14T10:00", "2013-01-14T10:00:00.000", "2013-01-14T10:00:59.999"),
        ("2013-01-14T10:00:00Z", "2013-01-14T10:00:00.000", "2013-01-14T10:00:00.999"),
        ("2013-01-14T10:00:00.5+01:00", "2013-01-14T09:00:00.500", "2013-01-14T09:00:00.599"),
        ("2013-02", "2013-02-01T00:00:00.000", "2013-02-28T23:59:59.999"),
        ("2012-02", "2012-02-01T00:00:00.000", "2012-02-29T23:59:59.999"),
        ("2013", "2013-01-01T00:00:00.000", "2013-12-31T23:59:59.999"),
    ],
)
def test_a_date_means_all_that_its_precision_leaves_open(text: str, first: str, last: str) -> None:
    expected = tuple(dates.ms(datetime.fromisoformat(one).replace(tzinfo=UTC)) for one in (first, last))
    assert dates.interval(text) == expected


NO_DATES = ("", "13", "2013-13", "2013-02-30", "2013-02-01T25:00", "2013-01-14T10", "x", "2013-01-14 10:00",
            "0000", "2013-01-14T10:00:00+99:00", "\u0662\u0660\u0661\u0663")  # fmt: skip


@pytest.mark.parametrize("text", NO_DATES)
def test_what_is_no_date(text: str) -> None:
    assert dates.interval(text) is None
