"""Every file in examples/ is held by a test: what nobody runs goes stale."""

from __future__ import annotations

import json
import re
from pathlib import Path

from fhir.resources.R4B.questionnaire import Questionnaire

from fhirgallop import api


def test_every_example_is_named_in_a_test_or_lies_in_a_folder_that_one_walks(root: Path) -> None:
    tests = "\n".join(
        path.read_text("utf-8") for path in (root / "tests").rglob("*.py") if path.name != Path(__file__).name
    )
    examples = [path for path in (root / "examples").rglob("*") if path.is_file()]
    assert examples
    # a folder may also be held as a whole, by a test that walks it
    walked = re.findall(r"examples.*?(\w+)\W+(?:r?glob|iterdir)\(", tests)
    held = {path for path in examples if path.name in tests or path.parent.name in walked}
    assert set(examples) - held == set()


def test_the_form_is_a_questionnaire_and_its_answers_are_answers_to_it(root: Path) -> None:
    """fernwood-form.questionnaire.json: valid, and every linkId of the response and of the map is asked."""
    folder = root / "examples/ehr"
    text = (folder / "fernwood-form.questionnaire.json").read_bytes()
    form = Questionnaire.model_validate_json(text)
    asked = _link_ids(json.loads(text))
    response = json.loads((folder / "fernwood-exam.questionnaireresponse.json").read_bytes())
    assert response["questionnaire"].split("|")[0] == form.url
    assert _link_ids(response) <= asked
    template = api.read_map(root / "examples/informatician/fernwood-heart-form.yaml")
    header = {
        "patient.number",
        "exam.number",
        "exam.day",
        "exam.clock",
        "exam.visit",
        "exam.examiner",
        "exam.state",
    }
    assert template.reads() - header <= asked


def _link_ids(node: object) -> set[str]:
    if isinstance(node, list):
        return set().union(*map(_link_ids, node))
    if isinstance(node, dict):
        own = {node["linkId"]} if "linkId" in node else set()
        return own.union(*map(_link_ids, node.values()))
    return set()
