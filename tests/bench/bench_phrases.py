"""Reading lines of text: lines a second on one core, and whether time grows as length does."""

from __future__ import annotations

import time
from collections.abc import Iterator
from pathlib import Path

from measuring import Row, at_least, at_most, interleaved, ratio
from ruamel.yaml import YAML

from fhirgallop.phrases import MAX_CHARACTERS, reader

CASES = Path(__file__).parents[1] / "cases" / "phrases"
PART = "no S3, III/VI holosystolic murmur at apex -> axilla; JVP 8 cm, S4? zebra. "


def lines() -> list[str]:
    """The English lines of the cases."""
    return [
        case["line"]
        for file in sorted(CASES.glob("*.yaml"))
        for case in YAML(typ="safe").load(file.read_text(encoding="utf-8"))
        if "language" not in case
    ]


def rows() -> Iterator[Row]:
    """Speed on the lines of the cases, and growth with length."""
    read, known = reader().read, lines()

    def every() -> None:
        for line in known:
            read(line)

    times = interleaved({"every": every}, rounds=15, calls=5)
    yield at_least(
        "lines of text read in a second, one core",
        len(known) / min(times["every"]),
        20_000,
        "/s",
        fails=2_000,
    )
    short, long = PART * 20, PART * 200
    growth = interleaved({"long": lambda: read(long), "short": lambda: read(short)}, rounds=9, calls=3)
    yield at_most("a line ten times as long / the line", ratio(growth, "long", "short"), 12, fails=20)
    start = time.perf_counter()
    read((PART * (MAX_CHARACTERS // len(PART) + 1))[:MAX_CHARACTERS])
    yield at_most("a line of a million characters", time.perf_counter() - start, 15, "s", fails=60)
