"""The Python face: few names, each of them there, quick to import, and the same as the command line."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

import fhirgallop
from fhirgallop.errors import MapError

HEAVY = ("fastapi", "starlette", "sqlalchemy", "pydantic", "httpx", "uvicorn", "typer", "rich")


def test_at_most_twelve_names_and_each_is_there() -> None:
    assert len(fhirgallop.__all__) <= 12
    assert list(fhirgallop.__all__) == sorted(set(fhirgallop.__all__))
    for name in fhirgallop.__all__:
        assert getattr(fhirgallop, name).__doc__
    with pytest.raises(AttributeError, match="nonsense"):
        _ = fhirgallop.nonsense


@pytest.mark.parametrize(
    "program",
    [
        "import fhirgallop",
        "import fhirgallop; fhirgallop.process({}, 'TEMPLATE')",
        "from fhirgallop import *",
    ],
)
def test_the_core_needs_no_framework(root: Path, program: str) -> None:
    template = root / "examples/informatician/fernwood-heart-form.yaml"
    told = "; import json, sys; print(json.dumps(sorted(sys.modules)))"
    words = [sys.executable, "-c", program.replace("TEMPLATE", str(template)) + told]
    loaded = json.loads(subprocess.run(words, capture_output=True, check=True, timeout=60).stdout)
    assert set(HEAVY).isdisjoint(loaded)
    if program == "import fhirgallop":
        assert {name for name in loaded if name.startswith("fhirgallop")} == {
            "fhirgallop",
            "fhirgallop.version",
        }


@pytest.fixture(scope="module")
def exam(root: Path) -> bytes:
    return (root / "examples/ehr/fernwood-exam.json").read_bytes()


@pytest.fixture(scope="module")
def path(root: Path) -> Path:
    return root / "examples/informatician/fernwood-heart-form.yaml"


def test_a_record_in_every_shape_and_a_map_or_its_path(
    exam: bytes, path: Path, root: Path, moment: Any
) -> None:
    (record,) = fhirgallop.read_records(root / "examples/ehr/fernwood-exam.json")
    assert isinstance(record, fhirgallop.LocalRecord)
    template = fhirgallop.read_map(path)
    results = [
        fhirgallop.process(shape, chosen, recorded=moment)
        for shape in (record, json.loads(exam), exam, exam.decode())
        for chosen in (template, path, str(path))
    ]
    assert all(result.ok and isinstance(result.exam, fhirgallop.Exam) for result in results)
    bundles = [_without_file_name(result.bundle) for result in results]
    assert all(bundle == bundles[0] for bundle in bundles)


def _without_file_name(bundle: Any) -> Any:
    """The source may have another name; whether numbers were decimals or floats may not show."""
    text = json.dumps(bundle, default=str).replace("fernwood-exam.json", "")
    return json.loads(text, parse_float=str)


def test_a_form_of_fhir_is_known_by_its_type(root: Path, path: Path, exam: bytes, moment: Any) -> None:
    form = json.loads((root / "examples/ehr/fernwood-exam.questionnaireresponse.json").read_bytes())
    result = fhirgallop.process(form, path, recorded=moment)
    assert result.exam == fhirgallop.process(exam, path, recorded=moment).exam


@pytest.mark.parametrize(
    ("record", "rule"),
    [
        (b"", "json-syntax"),
        ("{", "json-syntax"),
        ("[]", "record-none"),
        ("[{}, {}]", "record-several"),
        ('{"a": 1, "a": 2}', "json-duplicate-key"),
        ("{}", "map-patient-missing"),
        ({}, "map-patient-missing"),
        ({"resourceType": "QuestionnaireResponse"}, ""),
        ({1: 2}, ""),
        ({"vitals": object()}, ""),
        ({"vitals": float("nan")}, ""),
        ({"vitals": b"bytes"}, ""),
    ],
)
def test_what_is_wrong_in_a_record_is_an_issue_and_no_exception(record: Any, rule: str, path: Path) -> None:
    result = fhirgallop.process(record, path)
    assert not result.ok
    assert result.bundle is None
    assert all(isinstance(issue, fhirgallop.Issue) for issue in result.issues)
    assert any(issue.is_error for issue in result.issues)
    if rule:
        assert rule in {issue.rule for issue in result.issues}


def test_what_the_programmer_does_wrong_is_an_exception(exam: bytes, path: Path, tmp_path: Path) -> None:
    with pytest.raises(MapError) as told:
        fhirgallop.process(exam, tmp_path / "nowhere.yaml")
    assert told.value.issues
    with pytest.raises(OSError, match="nowhere"):
        list(fhirgallop.read_records(tmp_path / "nowhere.json"))


def test_an_earlier_bundle_makes_an_amendment(exam: bytes, path: Path, moment: Any) -> None:
    first = fhirgallop.process(exam, path, recorded=moment)
    changed = json.loads(exam)
    changed["vitals"]["hr"] = 90
    second = fhirgallop.process(changed, path, recorded=moment, earlier=first.bundle)
    assert second.bundle
    status = {
        entry["resource"]["code"]["text"]: entry["resource"]["status"]
        for entry in second.bundle["entry"]
        if entry["resource"]["resourceType"] == "Observation"
    }
    assert (status["Heart rate"], status["Body weight"]) == ("amended", "final")
