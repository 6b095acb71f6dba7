"""The command line on every example file, and on the published table."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import jsonschema_rs
import pytest
from ruamel.yaml import YAML

EXAMPLES = {
    "fernwood-exam.json": "fernwood-heart-form.yaml",
    "fernwood-exam.csv": "fernwood-heart-form.yaml",
    "fernwood-exam.hl7": "fernwood-heart-form.yaml",
    "fernwood-exam.questionnaireresponse.json": "fernwood-heart-form.yaml",
    "lindental-exam.csv": "lindental-herzbogen.yaml",
}


@pytest.fixture(scope="session")
def table(shared: Path) -> Path:
    """CirCor DigiScope 2022 (PhysioNet, v1.0.3): the published table of 942 examinations."""
    return shared / "data/circor-2022/training_data.csv"


@pytest.fixture(scope="session")
def circor(root: Path) -> Path:
    return root / "examples/informatician/circor-2022.yaml"


@pytest.mark.parametrize("edition", ["R4", "R4B", "R5"])
@pytest.mark.parametrize("record", EXAMPLES)
def test_every_example_is_coded(call: Any, root: Path, ehr: Path, record: str, edition: str) -> None:
    template = root / "examples/informatician" / EXAMPLES[record]
    done = call("code", ehr / record, "--map", template, "--edition", edition)
    assert done.code == 0, done.err
    bundle = json.loads(done.out)
    assert (bundle["resourceType"], bundle["type"]) == ("Bundle", "transaction")
    assert "1 coded, 0 refused, 0 unreadable" in done.err


@pytest.mark.parametrize("name", ["fernwood-heart-form.yaml", "circor-2022.yaml", "lindental-herzbogen.yaml"])
def test_every_map_has_no_fault_and_meets_the_schema(call: Any, root: Path, name: str) -> None:
    path = root / "examples/informatician" / name
    done = call("map", "check", path)
    assert done.code == 0, done.err
    assert f"{path}: map {path.stem}, version" in done.out.decode()
    schema = jsonschema_rs.validator_for(json.loads(call("map", "schema").out))
    schema.validate(YAML(typ="safe").load(path.read_text("utf-8")))
    assert not schema.is_valid({"template-map": 1})


def test_two_runs_of_the_published_table_give_the_same_bytes(
    call: Any, circor: Path, table: Path, tmp_path: Path
) -> None:
    outs = [tmp_path / "a.ndjson", tmp_path / "b.ndjson"]
    for out in outs:
        done = call("code", table, "--map", circor, "--recorded", "2026-12-01T08:30:00Z", "--out", out)
        assert done.code == 0, done.err[-2000:]
        assert "942 examinations: 942 coded, 0 refused, 0 unreadable" in done.err
    assert outs[0].read_bytes() == outs[1].read_bytes()
    assert outs[0].read_bytes().count(b"\n") == 942


def test_the_published_table_leaves_nothing_open(call: Any, circor: Path, table: Path) -> None:
    done = call("map", "check", circor, "--with", table)
    said = done.out.decode()
    assert done.code == 0, said
    assert "942 records: 0 would be refused; 0 could not be read" in said
    columns = table.read_text("utf-8").splitlines()[0].split(",")
    assert set(columns) <= {line.strip().split("  ")[0] for line in said.splitlines()}


def test_a_record_file_that_cannot_be_read_is_told(call: Any, fernwood: Path, tmp_path: Path) -> None:
    assert call("map", "check", fernwood, "--with", tmp_path / "nowhere.csv").code == 4
    broken = tmp_path / "broken.json"
    broken.write_text('{"patient": ', "utf-8")
    done = call("map", "check", fernwood, "--with", broken)
    assert done.code == 1
    assert "broken.json, line 1" in done.out.decode()
    assert "1 could not be read" in done.out.decode()


def test_what_was_there_stays_when_nothing_comes_out(
    call: Any, ehr: Path, fernwood: Path, tmp_path: Path
) -> None:
    record = json.loads((ehr / "fernwood-exam.json").read_bytes())
    record["heart"]["s4"] = "thundering"
    bad, out = tmp_path / "bad.json", tmp_path / "out.json"
    bad.write_text(json.dumps(record), "utf-8")
    out.write_text("of yesterday", "utf-8")
    done = call("code", bad, "--map", fernwood, "--out", out)
    assert done.code == 1
    assert "thundering" not in done.err
    assert out.read_text("utf-8") == "of yesterday"
    assert sorted(path.name for path in tmp_path.iterdir()) == ["bad.json", "out.json"]


def test_the_result_is_not_for_everybody(call: Any, ehr: Path, fernwood: Path, tmp_path: Path) -> None:
    """Patient data: no right for others of the machine."""
    out = tmp_path / "out.json"
    assert call("code", ehr / "fernwood-exam.json", "--map", fernwood, "--out", out).code == 0
    assert out.stat().st_mode & 0o007 == 0
