"""Bad input over REST and on the command line: the same cases, the same rules named, nothing half-written."""

from __future__ import annotations

import io
import json
import sqlite3
from collections.abc import Callable, Iterator, Mapping
from contextlib import closing
from pathlib import Path
from typing import Any

import openpyxl
import pytest
from ruamel.yaml import YAML

Case = Mapping[str, Any]

CASES: list[Case] = YAML(typ="safe").load(
    Path(__file__).parents[1].joinpath("cases/faces/bad_input.yaml").read_text("utf-8")
)
KINDS = {
    "json": ("application/json", ".json"),
    "ndjson": ("application/x-ndjson", ".ndjson"),
    "csv": ("text/csv", ".csv"),
    "xlsx": ("application/vnd.openxmlformats-officedocument.spreadsheetml.sheet", ".xlsx"),
    "hl7": ("x-application/hl7-v2+er7", ".hl7"),
    "form": ("application/fhir+json", ".json"),
    "word": ("application/msword", ".doc"),
}
HEADER = "pid,no,at,hr,weight,s4,words\n"
ROW = "P-1,E-1,2026-03-14T09:30:00+01:00,78,81.5,yes,J\u00fcngling\n"
OBX_11 = {
    # HL7 v2 table 0085 as of v2.5.1 and later; "" is an entry without status
    "F": "coded", "C": "coded", "P": "coded", "A": "coded", "W": "coded", "D": "coded", "X": "coded",
    "N": "coded", "B": "remarked", "I": "remarked", "O": "remarked", "R": "remarked", "S": "remarked",
    "V": "remarked", "U": "remarked", "Q": "remarked",
}  # fmt: skip


def _ten_megabytes(_: Any) -> bytes:
    return json.dumps({"pid": "P-1", "words": "x" * 10_000_000}).encode()


def _hundred_kilobytes(_: Any) -> bytes:
    return json.dumps({"pid": "P-1", "words": "x" * 100_000}).encode()


def _ten_thousand_deep(_: Any) -> bytes:
    return b'{"a":' * 10_000 + b"1" + b"}" * 10_000


def _forty_deep(_: Any) -> bytes:
    return b'{"a":' * 40 + b"1" + b"}" * 40


def _latin1_json(_: Any) -> bytes:
    return json.dumps({"words": "J\u00fcngling"}, ensure_ascii=False).encode("latin-1")


def _bom_json(sound: Callable[..., bytes]) -> bytes:
    return b"\xef\xbb\xbf" + sound("json")


def _latin1_csv(_: Any) -> bytes:
    return (HEADER + ROW).encode("latin-1")


def _bom_csv(_: Any) -> bytes:
    return (HEADER + ROW).encode("utf-8-sig")


def _mixed_ndjson(sound: Callable[..., bytes]) -> bytes:
    texts = [
        sound("json"),
        b'{"pid": ',
        sound("json", {"no": "E-2", "s4": "galloping"}),
        b"",
        sound("json", {"no": "E-3"}),
    ]
    return b"\n".join(texts) + b"\n"


def _hl7_twice(sound: Callable[..., bytes]) -> bytes:
    return sound("hl7") * 2


def _merged_workbook(_: Any) -> bytes:
    book = openpyxl.Workbook()
    sheet = book.active
    sheet.append(["pid", "no", "at", "hr", "weight", "s4", "words"])
    sheet.append(["P-1", "E-1", "2026-03-14T09:30:00+01:00", "78", "81.5", "yes", "Morning round."])
    sheet.append(["P-1", "E-2", "2026-03-14T18:30:00+01:00", "66", 81.5, "no", None])
    sheet.merge_cells("G2:G3")
    written = io.BytesIO()
    book.save(written)
    book.close()
    return written.getvalue()


MAKERS: Mapping[str, Callable[[Any], bytes]] = {
    made.__name__.removeprefix("_"): made
    for made in (
        _ten_megabytes, _hundred_kilobytes, _ten_thousand_deep, _forty_deep, _latin1_json, _bom_json,
        _latin1_csv, _bom_csv, _mixed_ndjson, _hl7_twice, _merged_workbook,
    )
}  # fmt: skip


def _body(case: Case, sound: Callable[..., bytes]) -> bytes:
    if "make" in case:
        return MAKERS[case["make"]](sound)
    if "text" in case:
        return str(case["text"]).encode()
    body = sound(case["form"], case.get("set"), tuple(case.get("drop", ())))
    if "replace" in case:
        old, new = (part.encode() for part in case["replace"])
        assert old in body, "the case changes nothing"
        body = body.replace(old, new, 1)
    return body


def _rules(case: Case, face: str) -> list[str]:
    return case.get("rules", case.get(face, []))


def _outcomes(answer: Any) -> Iterator[dict[str, Any]]:
    """Every OperationOutcome of an answer, wherever it stands."""
    if answer.get("resourceType") == "OperationOutcome":
        yield answer
    elif "results" in answer:
        yield from (result["outcome"] for result in answer["results"])
    else:
        yield answer["outcome"]


@pytest.mark.parametrize("case", CASES, ids=lambda case: case["name"])
def test_over_rest(case: Case, server: Any, sound: Any, tmp_path: Path) -> None:
    kind, _ = KINDS[case["form"]]
    answer = server.post(_body(case, sound), kind, map_=case.get("map", "bedside"))
    assert answer.status_code == case["status"], answer.text[:2000]
    told = answer.json()
    issues = [issue for outcome in _outcomes(told) for issue in outcome["issue"]]
    named = {coding["code"] for issue in issues for coding in issue["details"].get("coding", ())}
    assert named >= set(_rules(case, "rest"))
    assert all(len(issue["details"]["text"]) > 20 for issue in issues if issue["details"].get("coding"))
    bundles = [one["bundle"] for one in told.get("results", [told]) if "bundle" in one]
    assert len(bundles) == case.get("coded", 0)
    assert _stored(tmp_path / "faces.sqlite3") == len({json.dumps(bundle) for bundle in bundles})
    if answer.status_code >= 400:
        assert answer.headers["content-type"] == "application/fhir+json"
        assert told["resourceType"] == "OperationOutcome"
    else:
        assert bundles or any(issue["severity"] in ("error", "fatal", "warning") for issue in issues)
    for text in case.get("expect", ()):
        assert text in json.dumps(bundles)
    _keeps_secrets(case, json.dumps(issues))
    _keeps_secrets(case, "\n".join(server.log))


@pytest.mark.parametrize("case", CASES, ids=lambda case: case["name"])
def test_on_the_command_line(case: Case, call: Any, sound: Any, maps: Path, tmp_path: Path) -> None:
    record = tmp_path / f"record{KINDS[case['form']][1]}"
    record.write_bytes(_body(case, sound))
    out = tmp_path / "out.ndjson"
    done = call("code", record, "--map", maps / f"{case.get('map', 'bedside')}.yaml", "--out", out)
    said = done.err
    assert done.code == case["exit"], said
    assert "Traceback" not in said
    for rule in _rules(case, "cli"):
        (line, *_) = [line for line in said.splitlines() if f"[{rule}]" in line]
        assert str(record) in line or "nowhere.yaml" in line, "the message names the file"
        if len(changed := case.get("set", {})) == 1:
            assert f"field {next(iter(changed))}" in line, "the message names the field"
    written = out.read_bytes().splitlines() if out.exists() else []
    assert len(written) == case.get("coded", 0)
    assert all(json.loads(line)["resourceType"] == "Bundle" for line in written)
    assert {path.name for path in tmp_path.iterdir()} <= {record.name, out.name}, (
        "something half-written is left"
    )
    for text in case.get("expect", ()):
        assert text in out.read_text("utf-8")
    _keeps_secrets(case, said)


def _stored(database: Path) -> int:
    """How many examinations lie in the store: as many as came out, a repeated one once."""
    with closing(sqlite3.connect(database)) as other:
        (count,) = other.execute("SELECT count(*) FROM submissions").fetchone()
    return int(count)


def _keeps_secrets(case: Case, text: str) -> None:
    for secret in case.get("secret", ()):
        assert secret not in text


@pytest.mark.parametrize("letter", OBX_11)
def test_every_status_of_an_entry(letter: str, server: Any, sound: Any) -> None:
    """OBX-11 of every letter of table 0085: coded, and what has no counterpart is said."""
    body = sound("hl7").replace(b"||78||||||F", f"||78||||||{letter}".encode())
    answer = server.post(body, "application/hl7-v2")
    assert answer.status_code == 200, answer.text[:1000]
    codes = {c["code"] for i in answer.json()["outcome"]["issue"] for c in i["details"].get("coding", ())}
    assert bool({c for c in codes if c.startswith("hl7-entry-status")}) == (OBX_11[letter] == "remarked"), (
        codes
    )


def test_every_case_is_distinct() -> None:
    assert len({case["name"] for case in CASES}) == len(CASES) > 40
