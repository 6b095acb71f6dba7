"""Our judge and the general-purpose model library accept the Bundle of every example, in every edition."""

from __future__ import annotations

import pytest
from fhir.resources.bundle import Bundle as BundleR5
from fhir.resources.R4B.bundle import Bundle as BundleR4B

from fhirgallop.codes import fhirjson
from fhirgallop.conformance.validator import validate
from fhirgallop.intake.detect import open_records
from fhirgallop.mapping.reading import load_map
from fhirgallop.pipeline import process

EXAMPLES = [
    ("fernwood-exam.json", "fernwood-heart-form.yaml"),
    ("fernwood-exam.csv", "fernwood-heart-form.yaml"),
    ("fernwood-exam.hl7", "fernwood-heart-form.yaml"),
    ("fernwood-exam.questionnaireresponse.json", "fernwood-heart-form.yaml"),
    ("lindental-exam.csv", "lindental-herzbogen.yaml"),
]
MODELS = {"R4B": BundleR4B, "R5": BundleR5}


@pytest.mark.parametrize(("record", "template"), EXAMPLES)
@pytest.mark.parametrize("edition", ["R4", "R4B", "R5"])
@pytest.mark.parametrize("snomed", [True, False])
def test_an_example(root, moment, record, template, edition, snomed):
    chosen = load_map(root / "examples" / "informatician" / template)
    for read in open_records(root / "examples" / "ehr" / record):
        result = process(read, chosen, recorded=moment, edition=edition, snomed=snomed)
        assert result.ok, [str(issue) for issue in result.issues]
        text = fhirjson.write(result.bundle)
        assert [str(i) for i in validate(text, edition) if i.severity != "information"] == []
        if edition in MODELS:
            assert len(MODELS[edition].model_validate_json(text).entry) == len(result.bundle["entry"])


def test_every_record_and_map_is_an_example(root):
    records = {path.name for path in (root / "examples" / "ehr").iterdir()} - {
        "fernwood-form.questionnaire.json"
    }
    maps = {path.name for path in (root / "examples" / "informatician").iterdir()} - {"circor-2022.yaml"}
    assert records == {record for record, _ in EXAMPLES}
    assert maps == {template for _, template in EXAMPLES}
