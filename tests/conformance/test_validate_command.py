"""``fhirgallop validate``: files, lines and folders; text and outcome; exit codes."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest
from typer.testing import CliRunner

from fhirgallop.cli.main import app
from fhirgallop.cli.validate import check


@pytest.fixture
def folder(tmp_path: Path, observation: dict[str, Any]) -> Path:
    """A right file, a faulty file, and lines of both."""
    faulty = {**observation, "status": "done"}
    (tmp_path / "a.json").write_text(json.dumps(observation), encoding="utf-8")
    (tmp_path / "b.json").write_text(json.dumps(faulty, indent=1), encoding="utf-8")
    lines = [json.dumps(observation), "", json.dumps(faulty)]
    (tmp_path / "c.ndjson").write_text("\n".join(lines), encoding="utf-8")
    (tmp_path / "note.txt").write_text("not read", encoding="utf-8")
    return tmp_path


def _run(*arguments: str) -> tuple[int, str]:
    result = CliRunner().invoke(app, ["validate", *arguments])
    return result.exit_code, result.stdout


def test_a_right_file(folder: Path) -> None:
    assert _run(str(folder / "a.json")) == (0, "")


def test_a_folder_names_file_line_and_place(folder: Path) -> None:
    code, text = _run(str(folder))
    assert code == 1
    first, second = text.splitlines()
    assert f"{folder / 'b.json'}, line " in first
    assert "Observation.status" in first
    assert f"{folder / 'c.ndjson'}:3" in second
    assert second.endswith("[binding-required]")


def test_an_outcome(folder: Path) -> None:
    code, text = _run(str(folder), "--format", "outcome")
    outcome = json.loads(text)
    assert code == 1
    assert outcome["resourceType"] == "OperationOutcome"
    assert [issue["expression"] for issue in outcome["issue"]] == [["Observation.status"]] * 2


def test_all_well_is_an_outcome_too(folder: Path) -> None:
    code, text = _run(str(folder / "a.json"), "--format", "outcome", "--edition", "R5")
    assert (code, json.loads(text)["issue"][0]["severity"]) == (0, "information")


def test_a_file_that_is_not_there(tmp_path: Path) -> None:
    found = dict(check([tmp_path / "none.json"]))
    assert [issue.rule for issue in found[str(tmp_path / "none.json")]] == ["file-unreadable"]


def test_a_broken_package_is_told_before_any_file(folder: Path) -> None:
    package = folder / "site.tgz"
    package.write_bytes(b"broken")
    result = CliRunner().invoke(app, ["validate", str(folder), "--package", str(package)])
    assert result.exit_code != 0
    assert "site.tgz" in str(result.exception)
    assert result.stdout == ""


def test_a_profile_asked_for(folder: Path) -> None:
    code, text = _run(str(folder / "a.json"), "--profile", "https://clinic.example/StructureDefinition/x")
    assert code == 0
    assert "[profile-unknown]" in text
