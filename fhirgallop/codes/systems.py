"""Addresses of the code systems, and of our own artefacts."""

from __future__ import annotations

SNOMED = "http://snomed.info/sct"
LOINC = "http://loinc.org"
UCUM = "http://unitsofmeasure.org"
HPO = "http://human-phenotype-ontology.org"
DICOM = "http://dicom.nema.org/resources/ontology/DCM"

_THO = "http://terminology.hl7.org/CodeSystem/"
OBSERVATION_CATEGORY = _THO + "observation-category"
DATA_ABSENT_REASON = _THO + "data-absent-reason"
INTERPRETATION = _THO + "v3-ObservationInterpretation"
PROVENANCE_AGENT = _THO + "provenance-participant-type"
ACT_REASON = _THO + "v3-ActReason"

BASE = "https://fhirgallop.org/fhir"
FINDINGS = BASE + "/CodeSystem/findings"
QUALIFIERS = BASE + "/CodeSystem/qualifiers"


def profile(name: str) -> str:
    """Canonical address of one of our own profiles."""
    return f"{BASE}/StructureDefinition/{name}"
