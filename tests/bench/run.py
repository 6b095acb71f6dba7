"""Runs every bench_*.py beside it and writes README.md: `python tests/bench/run.py [NAME...]`.

Each module has a function `rows()` that gives measuring.Row values. The exit code is 1 when
a goal was missed by more than its row allows.
"""

from __future__ import annotations

import importlib
import os
import platform
import sys
from datetime import UTC, datetime
from pathlib import Path

HERE = Path(__file__).resolve().parent
HEAD = """# Benchmarks

Ratios are measured interleaved in one run (a ratio a round, the median over rounds); absolute times of a
shared machine mean little. Renewed by `python tests/bench/run.py`.

Machine: {machine}, {cores} cores, Python {python}; {date}.

| what | measured | goal | holds |
|---|---|---|---|
"""


def main(names: list[str]) -> int:
    """Measures, prints and writes the table."""
    sys.path.insert(0, str(HERE))
    modules = sorted(path.stem for path in HERE.glob("bench_*.py") if not names or path.stem in names)
    rows = []
    for module in modules:
        print(f"{module} ...", file=sys.stderr, flush=True)
        for row in importlib.import_module(module).rows():
            print(row, flush=True)
            rows.append(row)
    head = HEAD.format(
        machine=platform.machine(),
        cores=os.cpu_count(),
        python=platform.python_version(),
        date=datetime.now(tz=UTC).date().isoformat(),
    )
    if not names:
        (HERE / "README.md").write_text(head + "".join(f"{row}\n" for row in rows), encoding="utf-8")
    return 0 if all(row.passes for row in rows) else 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
