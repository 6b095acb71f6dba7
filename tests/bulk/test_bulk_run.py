"""Runs over every kind of file: what is written, what is counted, what is refused."""

from __future__ import annotations

import csv
import gzip
import json
from collections import Counter
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import openpyxl
import pytest

from fhirgallop import api, pipeline
from fhirgallop.bulk.coding import code, template_of
from fhirgallop.bulk.run import recorded_before, run
from fhirgallop.bulk.tally import Tally
from fhirgallop.bulk.wish import BulkError, Wish, sources
from fhirgallop.conformance.validator import validate
from fhirgallop.intake.record import LocalRecord
from fhirgallop.pipeline import Result

Backfill = Callable[..., tuple[Path, Tally]]
Table = Callable[[int], Path]
Rows = Callable[[int], list[str]]
Content = Callable[[Path], dict[str, bytes]]


def lines(out: Path, kind: str) -> list[bytes]:
    """Every line of one kind."""
    found = []
    for path in sorted((out / kind).iterdir()):
        data = gzip.decompress(path.read_bytes()) if path.suffix == ".gz" else path.read_bytes()
        found += data.splitlines()
    return found


def as_json(rows: list[str], header: str) -> list[dict[str, str]]:
    """The same rows as objects."""
    return [dict(zip(header.split(","), row.split(","), strict=True)) for row in rows]


HEADER = "exam,pid,day,murmur,rate,s4"


def test_the_same_as_coding_one_by_one(
    wish: Wish, table: Table, backfill: Backfill, tmp_path: Path, map_text: bytes
) -> None:
    source = table(70)
    out, tally = backfill(replace(wish, bundles=True), source)
    map_ = tmp_path / "map.yaml"
    map_.write_bytes(map_text)
    template = api.read_map(map_)
    wanted = [
        api.process(record, template, recorded=wish.recorded).bundle  # type: ignore[arg-type]
        for record in api.read_records(source)
    ]
    assert [json.loads(line) for line in lines(out, "Bundle")] == [
        json.loads(json.dumps(b, default=float)) for b in wanted
    ]
    assert tally.became == Counter({("coded",): 70})


def test_resources_by_type_are_whole_and_point_at_each_other(
    wish: Wish, table: Table, backfill: Backfill
) -> None:
    out, _ = backfill(wish, table(45))
    resources: dict[str, dict[str, Any]] = {}
    for kind in ("Observation", "DiagnosticReport", "Provenance"):
        for line in lines(out, kind):
            resource = json.loads(line)
            assert resource["resourceType"] == kind
            assert not [issue for issue in validate(resource, "R4") if issue.is_error]
            resources[f"{kind}/{resource['id']}"] = resource
    pointed = [
        part["reference"]
        for resource in resources.values()
        for name in ("result", "hasMember", "target")
        for part in resource.get(name, ())
    ]
    assert len(pointed) > 200
    assert set(pointed) <= resources.keys()


@pytest.mark.parametrize("kind", ["csv.gz", "ndjson", "ndjson.gz", "xlsx", "json", "tsv"])
def test_every_kind_of_file_gives_the_same_findings(
    kind: str, wish: Wish, rows: Rows, table: Table, backfill: Backfill, tmp_path: Path
) -> None:
    source = tmp_path / f"rounds.{kind}"
    text = "\n".join([HEADER, *rows(50)])
    objects = [json.dumps(row) for row in as_json(rows(50), HEADER)]
    match kind:
        case "csv.gz":
            source.write_bytes(gzip.compress(text.encode()))
        case "tsv":
            source.write_text(text.replace(",", "\t"), encoding="utf-8")
        case "json":
            source.write_text(f"[{','.join(objects)}]", encoding="utf-8")
        case "ndjson":
            source.write_text("\n".join(objects), encoding="utf-8")
        case "ndjson.gz":
            source.write_bytes(gzip.compress("\n".join(objects).encode()))
        case "xlsx":
            book = openpyxl.Workbook()
            for row in text.splitlines():
                book.active.append(row.split(","))
            book.save(source)
    out, tally = backfill(wish, source, name="other")
    plain, wanted = backfill(wish, table(50), name="plain")
    assert tally.findings == wanted.findings
    assert tally.records() == 50
    assert len(list((out / "journal").iterdir())) == 3
    ids = [sorted(json.loads(line)["id"] for line in lines(folder, "Observation")) for folder in (out, plain)]
    assert ids[0] == ids[1]


def test_messages_of_a_batch(wish: Wish, backfill: Backfill, tmp_path: Path) -> None:
    start = "MSH|^~\\&|A|B|C|D|20260101||ORU^R01|{0}|P|2.5.1\rPID|1||P{0}\rOBR|1||E{0}|X" + "|" * 21 + "F\r"
    answers = {"exam": "E{0}", "pid": "P{0}", "day": "2026-03-01", "murmur": "yes"}
    message = start + "".join(f"OBX|1|ST|{name}||{said}||||||F\r" for name, said in answers.items())
    source = tmp_path / "a.hl7"
    source.write_text("BHS|^~\\&\r" + "".join(message.format(n) for n in range(50)) + "BTS|50\r", newline="")
    _, tally = backfill(wish, source)
    assert tally.became == Counter({("coded",): 50})


def test_packed_output_is_the_same_text(wish: Wish, table: Table, backfill: Backfill) -> None:
    plain, _ = backfill(wish, table(45), name="plain")
    packed, _ = backfill(replace(wish, packed=True), table(45), name="packed")
    assert lines(packed, "Observation") == lines(plain, "Observation")
    assert {path.suffix for path in (packed / "Observation").iterdir()} == {".gz"}


def test_workers_do_not_change_the_output(
    wish: Wish, table: Table, backfill: Backfill, content: Content
) -> None:
    source = table(100)
    one, _ = backfill(wish, source, name="one")
    two, _ = backfill(wish, source, name="two", workers=2)
    assert content(one) == content(two)


def test_bad_lines_end_in_the_error_file_and_the_counts_add_up(
    wish: Wish, rows: Rows, backfill: Backfill, tmp_path: Path
) -> None:
    good, source = rows(300), tmp_path / "rounds.csv"
    broken = {
        10: (b"E10,P1,2020-01-01,yes", "csv-ragged-row"),
        50: (b'E50,"P1"x,2020-01-01,yes,70,no', "csv-quoting"),
        90: (b"E90,P\0,2020-01-01,yes,70,no", "csv-binary"),
        130: (b"E130," + b"P" * 70_000 + b",2020-01-01,yes,70,no", "csv-cell-too-long"),
        170: (b"E170,,2020-01-01,yes,70,no", ""),
        210: (b"E210,P1,soon,yes,70,no", ""),
        250: (b"E250,P1,1026-01-01,yes,70,no", "exam-before-1900"),
        290: (b"=HYPER(1),P1,2020-13-01,yes,70,no", ""),
    }
    data = [broken[n][0] if n in broken else row.encode() for n, row in enumerate(good)]
    source.write_bytes(b"\n".join([HEADER.encode(), *data]))
    out, tally = backfill(wish, source)
    with (out / "errors.csv").open(encoding="utf-8", newline="") as file:
        errors = list(csv.DictReader(file))
    assert {int(error["line"]) - 2 for error in errors} == broken.keys()
    assert {error["file"] for error in errors} == {str(source)}
    for error in errors:
        assert broken[int(error["line"]) - 2][1] in ("", error["rule"])
        assert len(error["reason"]) > 20
        assert "HYPER" not in error["reason"]
    assert tally.records() == 300
    assert tally.became == Counter({("coded",): 292, ("unreadable",): 4, ("refused",): 4})
    assert len(lines(out, "DiagnosticReport")) == 292


def test_one_bad_line_in_a_thousand_aborts_nothing(
    wish: Wish, rows: Rows, backfill: Backfill, tmp_path: Path
) -> None:
    """BK-7: partial success, with outcome files of OperationOutcome."""
    objects = [json.dumps(row) for row in as_json(rows(1000), HEADER)]
    objects[500] = objects[500][:-1]
    source = tmp_path / "rounds.ndjson"
    source.write_text("\n".join(objects) + "\n\n", encoding="utf-8")
    out, tally = backfill(replace(wish, each=250, review_each=0), source)
    assert tally.became == Counter({("coded",): 999, ("unreadable",): 1})
    outcomes = [json.loads(line) for line in lines(out, "OperationOutcome")]
    assert [o["issue"][0]["diagnostics"] for o in outcomes if o["issue"][0]["severity"] == "fatal"] == [
        f"{source}, line 501"
    ]
    for outcome in outcomes:
        assert not [issue for issue in validate(outcome, "R4") if issue.is_error]


def test_the_manifest_names_every_file_with_its_count(wish: Wish, table: Table, backfill: Backfill) -> None:
    """BK-3, BK-4, BK-12."""
    out, _ = backfill(wish, table(45))
    manifest = json.loads((out / "manifest.json").read_bytes())
    assert manifest["transactionTime"] == "2026-12-01T08:30:00Z"
    assert manifest["requiresAccessToken"] is False
    named = {item["url"]: item for item in [*manifest["output"], *manifest["outcome"]]}
    there = {
        str(p.relative_to(out))
        for p in out.rglob("*.ndjson")
        if p.stat().st_size and p.parent.name != "errors"
    }
    assert named.keys() == there
    for url, item in named.items():
        text = (out / url).read_bytes().splitlines()
        assert item["count"] == len(text)
        assert {json.loads(line)["resourceType"] for line in text} == {item["type"]}


def test_what_comes_twice_is_found_across_parts_and_files(
    wish: Wish, rows: Rows, table: Table, backfill: Backfill, tmp_path: Path
) -> None:
    first, second = table(60), tmp_path / "more.csv"
    changed = rows(60)[41].replace(",yes", ",no") + "x"
    second.write_text(
        "\n".join([HEADER, rows(60)[3], changed.removesuffix("x"), "N1,P1,2020-01-01,yes,70,no"])
    )
    out, tally = backfill(wish, first, second)
    said = [
        json.loads(line) for line in (out / "OperationOutcome" / "repeats.ndjson").read_bytes().splitlines()
    ]
    assert {o["issue"][0]["diagnostics"] for o in said} == {f"{second}, line 2", f"{second}, line 3"}
    assert sum(tally.repeats.values()) == 2
    assert tally.repeats["same",] >= 1


def test_a_broken_gzip_file_keeps_what_came_before(
    wish: Wish, rows: Rows, backfill: Backfill, tmp_path: Path
) -> None:
    source = tmp_path / "rounds.csv.gz"
    source.write_bytes(gzip.compress("\n".join([HEADER, *rows(3000)]).encode())[:-2000])
    out, tally = backfill(replace(wish, each=500, review_each=0), source)
    assert tally.became["unreadable",] == 1
    assert tally.became["coded",] > 500
    assert "gzip-broken" in (out / "errors.csv").read_text()


def test_a_folder_with_another_run_is_left_alone(
    wish: Wish, table: Table, backfill: Backfill, tmp_path: Path
) -> None:
    source = table(20)
    out, _ = backfill(wish, source)
    assert recorded_before(out) == wish.recorded
    with pytest.raises(BulkError, match="edition"):
        backfill(replace(wish, edition="R5"), source)
    source.write_text(source.read_text() + "E9,P1,2020-01-01,yes,70,no\n")
    with pytest.raises(BulkError, match="inputs"):
        backfill(wish, source)
    (tmp_path / "mine").mkdir()
    (tmp_path / "mine" / "letter.txt").write_text("x")
    with pytest.raises(BulkError, match="new folder"):
        run(wish, sources([source]), tmp_path / "mine", workers=1)


def test_inputs_that_cannot_be(tmp_path: Path, table: Table) -> None:
    source = table(3)
    with pytest.raises(BulkError, match="twice"):
        sources([source, tmp_path])
    (tmp_path / "a.pdf").write_bytes(b"x")
    with pytest.raises(BulkError, match="kind"):
        sources([tmp_path / "a.pdf"])
    (tmp_path / "empty").mkdir()
    with pytest.raises(BulkError, match="no record file"):
        sources([tmp_path / "empty"])


def test_a_fault_of_the_program_costs_one_record(
    wish: Wish, table: Table, monkeypatch: pytest.MonkeyPatch
) -> None:
    template, calls = template_of(wish), []
    process = pipeline.process

    def sometimes(record: LocalRecord, *rest: Any, **more: Any) -> Result:
        calls.append(record.line)
        if len(calls) == 2:
            raise ValueError("E1 of P1")
        return process(record, *rest, **more)

    monkeypatch.setattr(pipeline, "process", sometimes)
    became = [code(read, template, wish) for read in api.read_records(table(3))]
    assert [one.became for one in became] == ["coded", "refused", "coded"]
    assert [(issue.rule, issue.line) for issue in became[1].issues] == [("record-broke", 3)]
    assert "P1" not in became[1].issues[0].text


def test_a_folder_of_patients_data_is_not_for_everybody(wish: Wish, table: Table, backfill: Backfill) -> None:
    out, _ = backfill(wish, table(3))
    assert not out.stat().st_mode & 0o007


def test_a_folder_that_cannot_be_written_ends_the_run_and_it_goes_on_later(
    wish: Wish, table: Table, backfill: Backfill, tmp_path: Path, content: Content
) -> None:
    source = table(60)
    quiet, _ = backfill(wish, source, name="quiet")
    out = tmp_path / "out"
    out.mkdir(0o750)
    run_json = (quiet / "run.json").read_bytes()
    (out / "run.json").write_bytes(run_json)
    (out / "Observation").write_text("in the way")
    with pytest.raises(OSError, match="Observation"):
        backfill(wish, source)
    assert not [path for path in (out / "journal").iterdir() if not path.name.startswith(".")]
    (out / "Observation").unlink()
    backfill(wish, source)
    assert content(out) == content(quiet)
