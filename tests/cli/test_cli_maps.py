"""`fhirgallop map check` and `map schema`."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import jsonschema_rs
import pytest
from ruamel.yaml import YAML


@pytest.mark.parametrize("name", ["fernwood-heart-form", "circor-2022", "lindental-herzbogen"])
def test_the_examples_have_no_fault_and_meet_the_schema(call: Any, root: Path, name: str) -> None:
    path = root / "examples/informatician" / f"{name}.yaml"
    done = call("map", "check", path)
    assert done.returncode == 0, done.stderr
    assert f"map {name}, version" in done.stdout.decode()
    assert "no fault" in done.stdout.decode()
    printed = call("map", "schema")
    assert printed.returncode == 0
    schema = json.loads(printed.stdout)
    assert schema["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    jsonschema_rs.validator_for(schema).validate(YAML(typ="safe").load(path.read_text("utf-8")))


def test_every_fault_comes_at_once_with_line_and_cure(call: Any, root: Path, tmp_path: Path) -> None:
    text = (root / "examples/informatician/fernwood-heart-form.yaml").read_text("utf-8")
    path = tmp_path / "bad.yaml"
    bad = (
        text.replace("heart-sound.s3", "heart-sound.s5", 1)
        .replace("unit: kg}", "unit: bushel}", 1)
        .replace("note: remarks", "remark: remarks", 1)
    )
    lines = [
        number
        for number, (was, now) in enumerate(zip(text.splitlines(), bad.splitlines(), strict=True), start=1)
        if was != now
    ]
    assert len(lines) == 3
    path.write_text(bad, "utf-8")
    done = call("map", "check", path)
    assert done.returncode == 3
    said = done.stderr.splitlines()
    assert {line.split(" column")[0] for line in said} == {
        f"error: {path}, line {number}" for number in lines
    }
    assert call("code", root / "examples/ehr/fernwood-exam.json", "--map", path).returncode == 3


def test_with_records_what_is_open_is_counted(call: Any, root: Path, tmp_path: Path) -> None:
    template = root / "examples/informatician/fernwood-heart-form.yaml"
    sound = root / "examples/ehr/fernwood-exam.csv"
    assert call("map", "check", template, "--with", sound).returncode == 0
    header, row = sound.read_text("utf-8").splitlines()
    table = tmp_path / "open.csv"
    strange = row.replace(",left,lld,", ",thundering,lld,")
    assert strange != row
    table.write_text(
        "\n".join([f"{header},shoe", f"{row},43", f"{strange},44", f"{strange},"]) + "\n", "utf-8"
    )
    done = call("map", "check", template, "--with", table)
    said = done.stdout.decode()
    assert done.returncode == 1
    assert "3 records: 2 would be refused" in said
    assert ["shoe", "unread", "2", "1"] in [line.split() for line in said.splitlines()]
    assert ["heart.s4", "thundering", "2"] in [line.split() for line in said.splitlines()]


def test_the_published_table_leaves_nothing_open(call: Any, root: Path, shared: Path) -> None:
    """CirCor DigiScope 2022 (PhysioNet, v1.0.3): every column is read or ignored with a reason."""
    template = root / "examples/informatician/circor-2022.yaml"
    table = shared / "data/circor-2022/training_data.csv"
    done = call("map", "check", template, "--with", table)
    said = done.stdout.decode()
    assert done.returncode == 0, said
    assert "942 records: 0 would be refused; 0 could not be read" in said
    columns = table.read_text("utf-8").splitlines()[0].split(",")
    rows = {line.strip().split("  ")[0] for line in said.splitlines()}
    assert set(columns) <= rows


def test_a_record_file_that_cannot_be_read_is_told(call: Any, root: Path, tmp_path: Path) -> None:
    template = root / "examples/informatician/fernwood-heart-form.yaml"
    assert call("map", "check", template, "--with", tmp_path / "nowhere.csv").returncode == 4
    broken = tmp_path / "broken.json"
    broken.write_text('{"patient": ', "utf-8")
    done = call("map", "check", template, "--with", broken)
    assert done.returncode == 1
    assert "broken.json, line 1" in done.stdout.decode()
    assert "1 could not be read" in done.stdout.decode()
