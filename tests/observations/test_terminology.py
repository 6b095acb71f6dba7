"""The published code systems, value sets and maps are those of the catalogue."""

from __future__ import annotations

import json

import pytest
from fhir.resources.codesystem import CodeSystem
from fhir.resources.conceptmap import ConceptMap
from fhir.resources.R4B.conceptmap import ConceptMap as ConceptMapR4B
from fhir.resources.valueset import ValueSet

from fhirgallop.exam.catalogue import load
from fhirgallop.observations import terminology


@pytest.fixture(scope="module")
def files():
    return terminology.files(load())


def test_the_files_are_up_to_date(files, root):
    for path, content in files.items():
        written = root / "terminology" / path
        assert written.is_file(), f"python -m fhirgallop.observations.terminology writes {path}"
        assert written.read_bytes() == content, f"python -m fhirgallop.observations.terminology renews {path}"


def test_the_model_library_accepts_them(files):
    for path, content in files.items():
        resource = json.loads(content)
        if resource["resourceType"] == "CodeSystem":
            CodeSystem.model_validate(resource)
        elif resource["resourceType"] == "ValueSet":
            ValueSet.model_validate(resource)
        elif path.endswith("r5.json"):
            ConceptMap.model_validate(resource)
        else:
            ConceptMapR4B.model_validate(resource)


def test_every_grade_has_its_code(files):
    codes = [c["code"] for c in json.loads(files["codesystem/qualifiers.json"])["concept"]]
    assert len(codes) == len(set(codes))
    assert {"grade:1-of-6", "grade:6-of-6", "grade:2-to-3-of-6", "grade:4-of-4"} <= set(codes)


def test_a_broader_code_is_never_called_equivalent(files):
    targets = {
        (element["code"], target["code"]): target
        for group in json.loads(files["codesystem/findings-to-standard-codes.r4.json"])["group"]
        for element in group["element"]
        for target in element["target"]
    }
    assert targets["heart-sound.s4", "4592006"]["equivalence"] == "equivalent"
    assert targets["heart-sound.tumour-plop", "123824001"]["equivalence"] == "wider"
