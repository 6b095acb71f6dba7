"""A seeded table of many examinations (invented), and runs over it."""

from __future__ import annotations

import os
import random
import signal
import subprocess
import sys
from collections.abc import Callable, Iterator
from datetime import UTC, datetime
from pathlib import Path

import pytest

from fhirgallop.bulk.finish import finish
from fhirgallop.bulk.run import run
from fhirgallop.bulk.tally import Tally
from fhirgallop.bulk.wish import Wish, sources

MAP = """
template-map: 1
name: millbrook-round
version: "1"
title: Millbrook clinic, round sheet (invented)
record:
  patient: {field: pid, system: "https://millbrook.example/patients"}
  identifier: {field: exam, system: "https://millbrook.example/exams"}
  time: {field: day}
blank-means: not-recorded
lines:
  - finding: murmur
    field: murmur
    choice: {"yes": present, "no": absent}
  - finding: vital.heart-rate
    field: rate
    number: {unit: /min}
  - finding: heart-sound.s4
    field: s4
    choice: {"yes": present, "no": absent}
"""
HEADER = "exam,pid,day,murmur,rate,s4"


@pytest.fixture(scope="session")
def map_text() -> bytes:
    """An invented clinic's map."""
    return MAP.encode()


@pytest.fixture(scope="session")
def rows() -> Callable[[int], list[str]]:
    """So many rows of its table, always the same."""

    def make(count: int, *, seed: int = 7) -> list[str]:
        dice = random.Random(seed)
        signs = ["yes", "no", ""]
        return [
            f"E{number},P{number % 97},"
            f"{dice.randint(2016, 2025)}-0{dice.randint(1, 9)}-{dice.randint(10, 28)},"
            f"{dice.choice(signs)},{dice.randint(50, 110)},{dice.choice(signs)}"
            for number in range(count)
        ]

    return make


@pytest.fixture
def table(tmp_path: Path, rows: Callable[[int], list[str]]) -> Callable[[int], Path]:
    """The table as a CSV file."""

    def make(count: int) -> Path:
        path = tmp_path / "rounds.csv"
        path.write_text("\n".join([HEADER, *rows(count)]) + "\n", encoding="utf-8")
        return path

    return make


@pytest.fixture
def wish(map_text: bytes) -> Wish:
    """How the tests' runs are written: small parts, every examination held against the rules."""
    moment = datetime(2026, 12, 1, 8, 30, tzinfo=UTC)
    return Wish(map_text, "millbrook-round.yaml", moment, each=20, review_each=1)


@pytest.fixture
def backfill(tmp_path: Path) -> Callable[..., tuple[Path, Tally]]:
    """A whole run in this process and one worker; gives its folder and its counts."""

    def do(wish: Wish, *inputs: Path, name: str = "out", workers: int = 1) -> tuple[Path, Tally]:
        out = tmp_path / name
        found = sources(inputs)
        run(wish, found, out, workers=workers)
        return out, finish(wish, found, out)

    return do


@pytest.fixture
def started(tmp_path: Path, map_text: bytes) -> Iterator[Callable[..., subprocess.Popen[bytes]]]:
    """`fhirgallop backfill` as a process of its own, in a group of its own; all are gone at the end."""
    running: list[subprocess.Popen[bytes]] = []
    map_ = tmp_path / "millbrook-round.yaml"
    map_.write_bytes(map_text)

    def start(source: Path, out: Path, *words: str) -> subprocess.Popen[bytes]:
        command = [
            sys.executable, "-W", "error", "-m", "fhirgallop", "backfill", source, "--map", map_,
            "--out", out, "--recorded", "2026-12-01T08:30:00Z", "--part", "20", "--workers", "2", *words,
        ]  # fmt: skip
        with (tmp_path / "said").open("ab") as said:
            process = subprocess.Popen(command, stderr=said, start_new_session=True)
        running.append(process)
        return process

    yield start
    for process in running:
        if process.poll() is None:
            os.killpg(process.pid, signal.SIGKILL)
        process.wait()


@pytest.fixture(scope="session")
def content() -> Callable[[Path], dict[str, bytes]]:
    """Every file of a run's folder."""

    def read(out: Path) -> dict[str, bytes]:
        return {
            str(path.relative_to(out)): path.read_bytes()
            for path in sorted(out.rglob("*"))
            if path.is_file() and path.name != "run.lock"
        }

    return read
