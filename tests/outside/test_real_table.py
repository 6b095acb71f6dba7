"""942 published heart examinations, from the table to Bundles, and the counts reconcile.

Source: The CirCor DigiScope Phonocardiogram Dataset 1.0.3 (PhysioNet, 2022), training_data.csv, ODC-By 1.0.
The expected counts were taken from the table itself.
"""

from __future__ import annotations

import csv
from collections import Counter

import pytest
from fhir.resources.bundle import Bundle as BundleR5
from fhir.resources.R4B.bundle import Bundle as BundleR4B

from fhirgallop.codes import fhirjson
from fhirgallop.intake.detect import open_records
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping.reading import load_map
from fhirgallop.outcome import has_errors
from fhirgallop.pipeline import process


@pytest.fixture(scope="module")
def table(shared):
    path = shared / "data" / "circor-2022" / "training_data.csv"
    if not path.is_file():
        pytest.skip("the published table does not lie beside this checkout")
    return path


@pytest.fixture(scope="module")
def results(table, root, moment):
    template = load_map(root / "examples" / "informatician" / "circor-2022.yaml")
    read = list(open_records(table))
    assert all(isinstance(record, LocalRecord) for record in read)
    return [process(record, template, recorded=moment) for record in read]


def observed(results):
    """(finding id, presence or None, Observation) of every Observation."""
    for result in results:
        for entry in result.bundle["entry"]:
            resource = entry["resource"]
            if resource["resourceType"] == "Observation":
                value = resource.get("valueCodeableConcept", resource.get("dataAbsentReason"))
                own = value["coding"][-1]["code"] if value and "coding" in value else None
                yield resource["code"]["coding"][-1]["code"], own, resource


def test_every_examination_gives_a_bundle(results):
    assert len(results) == 942
    assert all(result.ok for result in results)


def test_murmurs_reconcile_with_the_table(results):
    presence = Counter(own for finding, own, _ in observed(results) if finding == "murmur")
    assert presence == {"presence:present": 179, "presence:absent": 695, "presence:not-examinable": 68}


def test_attributes_reconcile_with_the_table(results):
    found = Counter(
        finding
        for finding, own, resource in observed(results)
        if own == "presence:present" and "component" in resource
    )
    assert found["murmur.systolic"] == 178
    assert found["murmur.diastolic"] == 5


def test_murmur_sites_reconcile_with_the_table(results):
    sites = Counter(
        part["valueCodeableConcept"]["coding"][-1]["code"]
        for finding, _, resource in observed(results)
        if finding == "murmur"
        for part in resource.get("component", ())
        if part["code"]["coding"][-1]["code"] == "site"
    )
    assert sites == {
        "site:mitral": 140,
        "site:tricuspid": 124,
        "site:pulmonary": 120,
        "site:aortic": 108,
        "site:other": 2,
    }


@pytest.mark.parametrize("finding", ["systolic", "diastolic"])
@pytest.mark.parametrize(("axis", "column"), [("timing", "timing"), ("shape", "shape"), ("grade", "grading"),
                                              ("pitch", "pitch"), ("quality", "quality")])  # fmt: skip
def test_each_attribute_reconciles_value_by_value(results, table, finding, axis, column):
    with table.open(encoding="utf-8", newline="") as file:
        rows = [row[f"{finding.capitalize()} murmur {column}"] for row in csv.DictReader(file)]
    expected = sorted(Counter(value for value in rows if value != "nan").values())
    made = Counter(
        part["valueCodeableConcept"]["coding"][-1]["code"]
        for id_, _, resource in observed(results)
        if id_ == f"murmur.{finding}"
        for part in resource.get("component", ())
        if part["code"]["coding"][-1]["code"] == axis
    )
    assert sorted(made.values()) == expected


def test_heights_and_weights_keep_their_digits(results, table):
    with table.open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    for finding, column in (("vital.height", "Height"), ("vital.weight", "Weight")):
        made = [str(r["valueQuantity"]["value"]) for f, _, r in observed(results) if f == finding]
        assert sorted(made) == sorted(row[column] for row in rows if row[column] != "nan")


def test_no_column_is_left_unread(results):
    assert {name for result in results for name in result.unread} == set()
    assert not any(has_errors(result.issues) for result in results)


def test_two_runs_give_the_same_bytes(results, table, root, moment):
    template = load_map(root / "examples" / "informatician" / "circor-2022.yaml")
    again = [process(record, template, recorded=moment) for record in open_records(table)]
    assert [fhirjson.write(r.bundle) for r in results] == [fhirjson.write(r.bundle) for r in again]


def test_identities_are_unique_over_the_table(results):
    urls = Counter(e["fullUrl"] for r in results for e in r.bundle["entry"])
    assert max(urls.values()) == 1


@pytest.mark.parametrize("edition", ["R4B", "R5"])
def test_the_model_library_accepts_the_bundles(table, root, moment, edition):
    """Every tenth examination, and all that have a murmur in diastole."""
    model = {"R4B": BundleR4B, "R5": BundleR5}[edition]
    template = load_map(root / "examples" / "informatician" / "circor-2022.yaml")
    for number, record in enumerate(open_records(table)):
        if number % 10 == 0 or record.fields["Diastolic murmur timing"].values != ("nan",):
            result = process(record, template, recorded=moment, edition=edition)
            model.model_validate_json(fhirjson.write(result.bundle))
