"""The general-purpose model library accepts every Bundle; what differs between editions is known."""

from __future__ import annotations

import json

import pytest
from fhir.resources.bundle import Bundle as BundleR5
from fhir.resources.R4B.bundle import Bundle as BundleR4B

from fhirgallop.codes import fhirjson
from fhirgallop.conformance.editions import load

# what our references point to
TARGETS = {"Patient", "Encounter", "Practitioner", "Observation"}
MODELS = {"R4B": BundleR4B, "R5": BundleR5}


@pytest.mark.parametrize("edition", MODELS)
@pytest.mark.parametrize("snomed", [True, False])
def test_the_model_library_accepts_the_bundle(coded, edition, snomed):
    text = fhirjson.write(coded(bundle=True, edition=edition, snomed=snomed))
    made = MODELS[edition].model_validate_json(text)
    assert len(made.entry) == len(json.loads(text)["entry"])


def test_r4_and_r4b_are_written_alike(coded):
    r4, r4b = coded(bundle=True), coded(bundle=True, edition="R4B")
    assert [e["resource"] for e in r4["entry"][:-1]] == [e["resource"] for e in r4b["entry"][:-1]]
    assert r4["entry"][-1]["resource"].keys() == r4b["entry"][-1]["resource"].keys()


def test_only_the_provenance_of_r5_names_the_patient(coded):
    r4, r5 = coded(bundle=True), coded(bundle=True, edition="R5")
    assert [e["resource"] for e in r4["entry"][:-1]] == [e["resource"] for e in r5["entry"][:-1]]
    assert r5["entry"][-1]["resource"].keys() - r4["entry"][-1]["resource"].keys() == {"patient", "encounter"}


@pytest.mark.parametrize("kind", ["Observation", "Observation.component", "DiagnosticReport", "Bundle"])
@pytest.mark.parametrize("edition", ["R4B", "R5"])
def test_what_we_fill_is_defined_alike_in_every_edition(coded, kind, edition):
    """Compared with the published StructureDefinitions of 4.0.1, 4.3.0 and 5.0.0, element by element."""
    used = set()
    for entry in coded(bundle=True)["entry"]:
        resource = entry["resource"]
        if resource["resourceType"] == kind:
            used |= resource.keys()
        used |= {
            key for part in resource.get("component", ()) if kind == "Observation.component" for key in part
        }
    if kind == "Bundle":
        used = set(coded(bundle=True))
    ours, theirs = load("R4"), load(edition)
    for key in sorted(used - {"resourceType"}):
        mine, other = ours.child(kind, key), theirs.child(kind, key)
        assert other is not None, key
        assert mine.code == other.code, key
        assert mine.element.many == other.element.many, key
        # later editions allow more targets (the subject); none that R4 allows is gone, so ours stay right
        assert set(mine.type.targets) & TARGETS <= set(other.type.targets), key
