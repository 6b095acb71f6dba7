"""The charts of examples/clinician with the example examination: the cards they give, and the commands."""

from __future__ import annotations

import json
from datetime import datetime
from pathlib import Path
from typing import Any

import pytest
from typer.testing import CliRunner

from fhirgallop.api import process
from fhirgallop.chart.read import read_chart
from fhirgallop.cli.main import app
from fhirgallop.codes import fhirjson
from fhirgallop.conformance.validator import validate

NOW = "2026-03-14T10:00:00+01:00"
CHARTS = [
    ("sinus-rhythm-stiff-ventricle", [], []),
    (
        "atrial-fibrillation-today",
        ["interruptive"],
        ["s4.in-atrial-fibrillation", "pulse.regular-in-fibrillation"],
    ),
    ("atrial-fibrillation-history", [], []),
    ("mitral-stenosis-known-area", ["advisory"], ["s4.in-mitral-stenosis"]),
]


def arguments(root: Path, chart: str, *more: str) -> list[str]:
    return [
        "review", str(root / "examples/ehr/fernwood-exam.json"),
        "--map", str(root / "examples/informatician/fernwood-heart-form.yaml"),
        "--chart", str(root / f"examples/clinician/{chart}.chart.json"), "--now", NOW, *more,
    ]  # fmt: skip


def reviewed(root: Path, chart: str) -> dict[str, Any]:
    result = CliRunner().invoke(app, arguments(root, chart, "--format", "json"))
    assert result.exit_code == 0, result.output
    return dict(json.loads(result.stdout))


@pytest.mark.parametrize(("chart", "levels", "rules"), CHARTS)
def test_the_cards_of_a_chart(chart: str, levels: list[str], rules: list[str], root: Path) -> None:
    found = reviewed(root, chart)
    assert [card["level"] for card in found["cards"]] == levels
    said = [
        line["rule"] for card in found["cards"] for section in card["sections"] for line in section["lines"]
    ]
    assert said == rules
    assert found["folded"] == []


@pytest.mark.parametrize("chart", [*(chart for chart, _, _ in CHARTS), "urgent-combination"])
def test_the_printed_cards_are_those_of_today(chart: str, root: Path) -> None:
    """The file beside each chart holds `cards` of `fhirgallop review ... --format json`."""
    printed = (root / f"examples/clinician/{chart}.cards.json").read_text(encoding="utf-8")
    assert json.loads(printed) == reviewed(root, chart)["cards"]


def test_an_urgent_combination_shows_the_phrase_and_its_entries(root: Path) -> None:
    found = reviewed(root, "urgent-combination")
    (card,) = found["cards"]
    assert (card["level"], card["title"]) == ("urgent", "urgent clinical review")
    assert set(card) == {"level", "key", "title", "entries", "answers", "notice"}
    assert len(card["entries"]) >= 2
    assert found["ask"] is None


@pytest.mark.parametrize("chart", [*(chart for chart, _, _ in CHARTS), "urgent-combination"])
def test_every_example_chart_is_conformant_and_read_whole(chart: str, root: Path) -> None:
    text = (root / f"examples/clinician/{chart}.chart.json").read_bytes()
    assert validate(text, "R4") == []
    value, _ = fhirjson.read(text)
    record = (root / "examples/ehr/fernwood-exam.json").read_bytes()
    exam = process(record, root / "examples/informatician/fernwood-heart-form.yaml").exam
    assert exam is not None
    read = read_chart(value, exam, datetime.fromisoformat(NOW))
    assert read.issues == ()
    assert read.unknown == 0


def test_every_example_chart_is_run_here(root: Path) -> None:
    charts = [*(chart for chart, _, _ in CHARTS), "urgent-combination"]
    named = {f"{chart}.{kind}.json" for chart in charts for kind in ("chart", "cards")}
    assert {p.name for p in (root / "examples/clinician").glob("*")} == named


def test_the_sheet_is_text_on_standard_output(root: Path) -> None:
    result = CliRunner().invoke(app, arguments(root, "atrial-fibrillation-today"))
    assert result.exit_code == 0
    assert result.stdout.startswith("Review of the examination of 2026-03-14T09:30:00+01:00")
    assert "ONE QUESTION" in result.stdout


def test_another_patients_chart_is_said_and_gives_nothing(root: Path, tmp_path: Path) -> None:
    chart = (root / "examples/clinician/atrial-fibrillation-today.chart.json").read_text(encoding="utf-8")
    other = tmp_path / "other.json"
    other.write_text(chart.replace("F-20417", "F-99999"), encoding="utf-8")
    arguments_ = arguments(root, "atrial-fibrillation-today", "--format", "json")
    arguments_[arguments_.index("--chart") + 1] = str(other)
    result = CliRunner().invoke(app, arguments_)
    assert result.exit_code == 0
    found = json.loads(result.stdout)
    assert found["cards"] == []
    assert any("chart-other-patient" in issue for issue in found["issues"])


@pytest.mark.parametrize(
    ("change", "code"),
    [
        ({"--now": "today"}, 2),
        ({"--chart": "{tmp}/broken.json"}, 1),
        ({"--rules": "{tmp}/broken.yaml"}, 3),
        ({"--codes": "{tmp}/broken.csv"}, 3),
    ],
)
def test_exit_codes(change: dict[str, str], code: int, root: Path, tmp_path: Path) -> None:
    (tmp_path / "broken.json").write_text("{", encoding="utf-8")
    (tmp_path / "broken.yaml").write_text("rules: [{id: x}]\n", encoding="utf-8")
    (tmp_path / "broken.csv").write_text("system,code\nx,y\n", encoding="utf-8")
    given = arguments(root, "atrial-fibrillation-today")
    for name, template in change.items():
        value = template.replace("{tmp}", str(tmp_path))
        if name in given:
            given[given.index(name) + 1] = value
        else:
            given += [name, value]
    assert CliRunner().invoke(app, given).exit_code == code


def test_a_site_may_silence_a_rule(root: Path, tmp_path: Path) -> None:
    site = tmp_path / "site.yaml"
    site.write_text("silence: [s4.in-atrial-fibrillation, s4.needs-atrial-contraction]\n", encoding="utf-8")
    given = arguments(root, "atrial-fibrillation-today", "--format", "json", "--rules", str(site))
    result = CliRunner().invoke(app, given)
    assert result.exit_code == 0, result.output
    assert [card["level"] for card in json.loads(result.stdout)["cards"]] == ["advisory"]


def test_rules_list_show_check_and_sheet(tmp_path: Path) -> None:
    run = CliRunner().invoke
    listed = run(app, ["rules", "list", "--tier", "T1"])
    assert listed.exit_code == 0
    assert "s4.in-atrial-fibrillation" in listed.stdout
    assert "s4.history-of-fibrillation" not in listed.stdout
    assert "left out" in run(app, ["rules", "list"]).stdout
    shown = run(app, ["rules", "show", "s4.in-atrial-fibrillation"])
    assert "McGee" in shown.stdout
    assert run(app, ["rules", "show", "s4.nothing"]).exit_code == 2
    site = tmp_path / "site.yaml"
    site.write_text("silence: [s4.nothing]\n", encoding="utf-8")
    checked = run(app, ["rules", "check", str(site)])
    assert checked.exit_code == 1
    assert "s4.nothing" in checked.stdout
    out = tmp_path / "sheet.md"
    assert run(app, ["rules", "sheet", "--out", str(out)]).exit_code == 0
    assert out.read_text(encoding="utf-8").startswith("# Rules for local review before use")
