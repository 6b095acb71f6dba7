"""The tables of codes and sources: whole, from seen codes only, and a site's rows over them."""

from __future__ import annotations

import csv
from pathlib import Path
from typing import Any

import pytest

from fhirgallop.chart import tables
from fhirgallop.chart.elements import Code
from fhirgallop.chart.known import known
from fhirgallop.codes import systems
from fhirgallop.exam.context import Source

HEAD = "system,code,display,use,id,state,answers,qualifiers,contextual\n"


def rows(root: Path, name: str) -> list[dict[str, str]]:
    with (root / "terminology" / name).open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def test_every_code_was_seen(root: Path, shared: Path) -> None:
    """No code from memory: each stands in the evidence with its name, at least with medium confidence."""
    with (shared / "evidence" / "codes.tsv").open(encoding="utf-8", newline="") as file:
        seen = {r["code"]: r for r in csv.DictReader(file, delimiter="\t", quoting=csv.QUOTE_NONE)}
    found = rows(root, "chart-codes.csv")
    found += [
        {**r, "code": r["key"], "display": r["note"]}
        for r in rows(root, "chart-sources.csv")
        if r["system"] == systems.SNOMED
    ]
    for row in found:
        evidence = seen[row["code"]]
        assert evidence["confidence"] in ("high", "medium"), row["code"]
        assert "FSN not seen" not in evidence["display"] + evidence["sources"], row["code"]
        assert row["display"] == evidence["display"], row["code"]
        assert row.get("confidence", evidence["confidence"]) == evidence["confidence"], row["code"]


def test_no_code_stands_twice_for_one_use(root: Path) -> None:
    pairs = [(r["system"], r["code"], use) for r in rows(root, "chart-codes.csv") for use in r["use"].split()]
    assert len(pairs) == len(set(pairs))


def test_codes_that_are_read_as_several_ids() -> None:
    """Only these codes are ambiguous, and each for a reason: two questions, or echo against catheter."""
    several = {
        code.code: {s.id for s in said}
        for code, said in tables.shipped().uses["observation"].items()
        if len(said) > 1
    }
    assert several == {
        "164906009": {"ecg.av-conduction", "rhythm.diagnosis"},
        "276755008": {"catheter.right-atrial-pressure", "echo.right-atrial-pressure"},
        "276772001": {"catheter.rv-systolic-pressure", "echo.rv-systolic-pressure"},
        "80276-9": {"heart-sound.intensity", "heart-sound.prosthetic"},
    }
    assert all(len(said) == 1 for said in tables.shipped().uses["condition"].values())


def test_no_condition_code_is_a_rhythm() -> None:
    for said in tables.shipped().uses["condition"].values():
        assert not any(s.id == "rhythm.diagnosis" for s in said)


def test_a_broader_code_identifies_nothing() -> None:
    broader = {
        Code(c.system, c.code)
        for k in known().values()
        for c in k.codings
        if c.fit == "broader" and c.system == systems.SNOMED
    }
    exact = {Code(c.system, c.code) for k in known().values() for c in k.codings if c.fit == "exact"}
    for use in ("observation", "condition"):
        added = {code for code, said in tables.shipped().uses[use].items() if any(s.answers for s in said)}
        assert not (broader - exact - added) & set(tables.shipped().uses[use])


def test_every_source_is_named_by_the_table() -> None:
    named = {source for found in tables.shipped().sources.values() for source in found.values()}
    # what is of today's examination never comes from a chart
    assert set(Source) - named == {Source.EXAM}


def test_a_site_adds_codes_and_replaces_ours() -> None:
    site, issues = tables.with_site(
        HEAD
        + "https://clinic.example/codes,CV1,Cardioversion,procedure,procedure.cardioversion,present,,,\n"
        + "snomed,25510005,Prosthesis,device,device.prosthetic-valve,present,mechanical,valve:mitral,\n",
        "site.csv",
    )
    assert not issues
    assert site is not None
    assert (
        site.uses["procedure"][Code("https://clinic.example/codes", "CV1")][0].id == "procedure.cardioversion"
    )
    (replaced,) = site.uses["device"][Code(systems.SNOMED, "25510005")]
    assert replaced.answers == ("mechanical",)
    assert tables.shipped().uses["device"][Code(systems.SNOMED, "25510005")][0].answers == ("undetermined",)


@pytest.mark.parametrize(
    ("row", "words"),
    [
        ("x,CV1,d,procedure,procedure.nothing,present,,,", "no id"),
        ("x,CV1,d,dance,procedure.cardioversion,present,,,", "known words"),
        ("x,CV1,d,procedure,procedure.cardioversion,maybe,,,", "known words"),
        ("x,,d,procedure,procedure.cardioversion,present,,,", "known words"),
        ("x,CV1,d,value,rhythm.diagnosis,present,polka,,", "an answer"),
        ("x,CV1,d,device,device.prosthetic-valve,present,,valve:fifth,", "no property"),
        ("x,CV1,d,device,device.prosthetic-valve,present,,grade,", "no property"),
        ("x,CV1,d,condition,,present,,,", "no id"),
        ("x,CV1", "columns"),
    ],
)
def test_faults_of_a_site_file_come_with_their_line(row: str, words: str) -> None:
    made, issues = tables.with_site(f"{HEAD}{row}\n", "site.csv")
    assert made is None
    assert [(i.source, i.line) for i in issues] == [("site.csv", 2)]
    assert words in issues[0].text


def test_a_site_code_is_read(chart_of: Any, lines: Any) -> None:
    site, _ = tables.with_site(
        HEAD
        + "https://clinic.example/codes,CV1,Cardioversion,procedure,procedure.cardioversion,present,,,\n",
        "s.csv",
    )
    procedure = {
        "is": "Procedure",
        "status": "completed",
        "code": "site:CV1",
        "performedDateTime": "2026-11-25",
    }
    assert lines(chart_of([procedure])) == []
    assert lines(chart_of([procedure], tables=site)) == [
        "procedure.cardioversion present procedure @2026-11-25"
    ]
