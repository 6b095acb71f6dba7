"""`fhirgallop code`: one record and many, files that appear whole, exit codes, repeated and amended."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import pytest

AT = ("--recorded", "2026-12-01T08:30:00Z")


def bundles(text: bytes) -> list[Any]:
    """The Bundles of NDJSON."""
    return [json.loads(line) for line in text.splitlines()]


def record(path: Path, ehr: Path, **groups: dict[str, Any]) -> Path:
    """The example record with boxes changed, as a file."""
    value = json.loads((ehr / "fernwood-exam.json").read_bytes())
    for name, boxes in groups.items():
        value[name] = {**value[name], **boxes}
    path.write_text(json.dumps(value), "utf-8")
    return path


def test_one_record_gives_readable_json_and_nothing_else_on_standard_output(
    call: Any, ehr: Path, fernwood: Path
) -> None:
    done = call("code", ehr / "fernwood-exam.json", "--map", fernwood)
    assert done.code == 0
    assert json.loads(done.out)["resourceType"] == "Bundle"
    assert b'\n  "type"' in done.out
    assert "1 coded" in done.err


def test_several_records_give_ndjson(call: Any, ehr: Path, fernwood: Path) -> None:
    files = [
        ehr / f"fernwood-exam.{ending}" for ending in ("json", "csv", "hl7", "questionnaireresponse.json")
    ]
    done = call("code", *files, "--map", fernwood, *AT)
    assert done.code == 0
    found = bundles(done.out)
    assert len(found) == 4
    observations = [
        [e for e in bundle["entry"] if e["resource"]["resourceType"] == "Observation"] for bundle in found
    ]
    assert all(one == observations[0] for one in observations), "the form makes no difference"


def test_a_folder_is_walked_and_other_files_are_left_alone(
    call: Any, ehr: Path, fernwood: Path, tmp_path: Path
) -> None:
    folder = tmp_path / "in" / "deeper"
    folder.mkdir(parents=True)
    for number in "AB":
        record(folder / f"{number}.json", ehr, exam={"number": number})
    (folder / "notes.md").write_text("not a record", "utf-8")
    out = tmp_path / "out.ndjson"
    done = call("code", tmp_path / "in", "--map", fernwood, "--out", out)
    assert (done.code, len(bundles(out.read_bytes()))) == (0, 2)


def test_a_run_can_be_repeated_byte_for_byte(call: Any, ehr: Path, fernwood: Path) -> None:
    runs = [call("code", ehr / "fernwood-exam.json", "--map", fernwood, *AT).out for _ in range(2)]
    assert runs[0] == runs[1]
    assert b"2026-12-01T08:30:00Z" in runs[0]


def test_editions_and_snomed(call: Any, ehr: Path, fernwood: Path) -> None:
    told = call("code", ehr / "fernwood-exam.json", "--map", fernwood, "--edition", "R5", "--no-snomed")
    assert told.code == 0
    assert b"http://snomed.info/sct" not in told.out
    assert call("code", ehr / "fernwood-exam.json", "--map", fernwood, "--edition", "R3").code == 2


def test_a_changed_record_amends_its_earlier_bundle(
    call: Any, ehr: Path, fernwood: Path, tmp_path: Path
) -> None:
    earlier = tmp_path / "earlier.json"
    assert call("code", ehr / "fernwood-exam.json", "--map", fernwood, "--out", earlier).code == 0
    changed = record(tmp_path / "changed.json", ehr, vitals={"hr": 80})
    done = call("code", changed, "--map", fernwood, "--amends", earlier)
    assert done.code == 0
    rate = next(
        entry["resource"] for entry in json.loads(done.out)["entry"]
        if entry["resource"].get("code", {}).get("text") == "Heart rate"
    )  # fmt: skip
    assert rate["status"] in ("amended", "corrected")
    two = call("code", changed, changed, "--map", fernwood, "--amends", earlier)
    assert two.code == 2
    assert "exactly one" in two.err


def test_the_file_of_results_appears_whole_or_not_at_all(
    call: Any, ehr: Path, fernwood: Path, tmp_path: Path
) -> None:
    bad = record(tmp_path / "bad.json", ehr, vitals={"hr": "fast"})
    out = tmp_path / "out.json"
    assert call("code", bad, "--map", fernwood, "--out", out).code == 1
    assert not out.exists()
    assert call("code", ehr / "fernwood-exam.json", bad, "--map", fernwood, "--out", out).code == 1
    assert json.loads(out.read_bytes())["resourceType"] == "Bundle"
    assert sorted(path.name for path in tmp_path.iterdir()) == ["bad.json", "out.json"]


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT, signal.SIGKILL])
def test_a_run_that_is_ended_leaves_no_result(
    ehr: Path, fernwood: Path, tmp_path: Path, number: signal.Signals
) -> None:
    """Ended while records still come in, through a pipe that stays open."""
    pipe, out = tmp_path / "endless.ndjson", tmp_path / "out.ndjson"
    os.mkfifo(pipe)
    feed = os.open(pipe, os.O_RDWR)  # does not wait for a reader, who may have died at once
    running = subprocess.Popen(
        [sys.executable, "-m", "fhirgallop", "code", str(pipe), "--map", str(fernwood), "--out", str(out)],
        stderr=subprocess.PIPE,
        text=True,
    )
    try:
        line = json.dumps(json.loads((ehr / "fernwood-exam.json").read_bytes())).encode() + b"\n"
        os.write(feed, line * 8)
        while not list(tmp_path.glob(".out.ndjson.*")) and running.poll() is None:
            time.sleep(0.02)
        running.send_signal(number)
        _, said = running.communicate(timeout=60)
    finally:
        running.kill()
        os.close(feed)
    assert "Traceback" not in said
    assert running.returncode == {signal.SIGTERM: 143, signal.SIGINT: 130}.get(number, -number), said
    assert not out.exists()
    if number != signal.SIGKILL:
        assert [path.name for path in tmp_path.iterdir()] == [pipe.name]


def test_all_issues_in_a_file(call: Any, ehr: Path, fernwood: Path, tmp_path: Path) -> None:
    bad = record(tmp_path / "bad.json", ehr, vitals={"hr": "fast"})
    trail = tmp_path / "issues.ndjson"
    call("code", bad, ehr / "fernwood-exam.json", "--map", fernwood, "--issues", trail)
    (outcome,) = bundles(trail.read_bytes())
    assert outcome["resourceType"] == "OperationOutcome"
    assert "bad.json" in json.dumps(outcome)


@pytest.mark.parametrize(
    ("words", "code", "said"),
    [
        (("nowhere.json", "--map", "MAP"), 4, "nowhere.json: No such file"),
        (("RECORD", "--map", "nowhere.yaml"), 3, "nowhere.yaml"),
        (("RECORD",), 2, "--map"),
        (("--map", "MAP"), 2, ""),
        (("RECORD", "--map", "MAP", "--recorded", "yesterday"), 2, "2026-12-01T08:30:00Z"),
        (("RECORD", "--map", "MAP", "--recorded", "2026-12-01T08:30:00"), 2, "zone"),
        (("RECORD", "--map", "MAP", "--amends", "RECORD"), 2, "no Bundle"),
        (("RECORD", "--map", "MAP", "--out", "/no/such/folder/out.json"), 4, "/no/such/folder/out.json"),
        (("EMPTY", "--map", "MAP"), 1, "no examination"),
    ],
)
def test_exit_codes(
    call: Any, ehr: Path, fernwood: Path, tmp_path: Path, words: Any, code: int, said: str
) -> None:
    known = {"MAP": fernwood, "RECORD": ehr / "fernwood-exam.json", "EMPTY": tmp_path}
    done = call("code", *(known.get(word, word) for word in words))
    assert done.code == code
    assert said in done.err.replace("\n", " ")
    assert "Traceback" not in done.err


def test_without_a_terminal_nothing_is_coloured_and_no_bar_is_drawn(
    run: Any, ehr: Path, fernwood: Path
) -> None:
    for env in ({}, {"NO_COLOR": "1"}, {"TERM": "dumb"}):
        done = run("code", ehr / "fernwood-exam.json", "--map", fernwood, **env)
        assert done.returncode == 0
        assert "\x1b" not in done.stdout + done.stderr


def test_a_reader_that_goes_away_is_no_traceback(fernwood: Path, ehr: Path) -> None:
    done = subprocess.run(
        f"{sys.executable} -m fhirgallop code {ehr / 'fernwood-exam.json'} --map {fernwood} | head -c 10",
        shell=True, capture_output=True, check=False,
    )  # fmt: skip
    assert b"Traceback" not in done.stderr
    assert b"Exception ignored" not in done.stderr
