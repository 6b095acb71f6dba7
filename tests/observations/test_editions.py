"""The general-purpose model library accepts every Bundle; what differs between editions is known."""

from __future__ import annotations

import json

import pytest
from fhir.resources.bundle import Bundle as BundleR5
from fhir.resources.R4B.bundle import Bundle as BundleR4B

from fhirgallop.codes import fhirjson

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
