"""A run killed at any moment and started again: no examination lost or doubled, the same bytes.

FHIRGALLOP_KILLS=20 for the full count of moments.
"""

from __future__ import annotations

import os
import random
import signal
import subprocess
import time
from collections.abc import Callable
from pathlib import Path

KILLS = int(os.environ.get("FHIRGALLOP_KILLS", "4"))
PATIENCE = 60

Started = Callable[..., subprocess.Popen[bytes]]
Table = Callable[[int], Path]
Content = Callable[[Path], dict[str, bytes]]


def done(out: Path) -> int:
    """Parts in the journal."""
    journal = out / "journal"
    return sum(not path.name.startswith(".") for path in journal.iterdir()) if journal.is_dir() else 0


def until(process: subprocess.Popen[bytes], out: Path, parts: int) -> None:
    """Waits until so many parts are done, or the process has ended."""
    end = time.monotonic() + PATIENCE
    while done(out) < parts and process.poll() is None:
        assert time.monotonic() < end, "nothing gets done"
        time.sleep(0.002)


def workers_of(process: subprocess.Popen[bytes]) -> list[int]:
    """Ids of its worker processes."""
    found = []
    for entry in Path("/proc").iterdir():
        if entry.name.isdecimal():
            try:
                parent = int((entry / "stat").read_text().rpartition(")")[2].split()[1])
                line = (entry / "cmdline").read_bytes()
            except OSError:
                continue
            if parent == process.pid and b"spawn_main" in line:
                found.append(int(entry.name))
    return found


def test_killed_at_random_moments_gives_the_same_bytes(
    tmp_path: Path, table: Table, started: Started, content: Content
) -> None:
    source, dice = table(300 * (KILLS + 3)), random.Random(11)
    assert started(source, tmp_path / "quiet").wait(PATIENCE) == 0
    killed = 0
    for number in range(KILLS):
        process = started(source, tmp_path / "killed")
        until(process, tmp_path / "killed", done(tmp_path / "killed") + dice.randint(0, 4))
        time.sleep(dice.random() * 0.05)
        if process.poll() is None:
            killed += 1
            if number % 2:  # the first process alone: the workers have to see it themselves
                process.kill()
            else:
                os.killpg(process.pid, signal.SIGKILL)
        process.wait(PATIENCE)
    assert killed == KILLS
    assert started(source, tmp_path / "killed").wait(PATIENCE) == 0
    assert content(tmp_path / "killed") == content(tmp_path / "quiet")


def test_workers_end_with_the_process_that_started_them(
    tmp_path: Path, table: Table, started: Started
) -> None:
    process = started(table(2000), tmp_path / "out")
    until(process, tmp_path / "out", 2)
    workers = workers_of(process)
    assert len(workers) == 2
    process.kill()
    process.wait(PATIENCE)
    end = time.monotonic() + PATIENCE
    while any(alive(worker) for worker in workers):
        assert time.monotonic() < end, "a worker stays"
        time.sleep(0.01)


def alive(process: int) -> bool:
    """Whether a process runs (one that has ended and that nobody has asked for does not)."""
    try:
        return Path(f"/proc/{process}/stat").read_text().rpartition(")")[2].split()[0] not in "ZX"
    except OSError:
        return False


def test_a_worker_that_dies_is_replaced_and_nothing_is_lost(
    tmp_path: Path, table: Table, started: Started, content: Content
) -> None:
    source = table(1000)
    assert started(source, tmp_path / "quiet").wait(PATIENCE) == 0
    process = started(source, tmp_path / "out")
    until(process, tmp_path / "out", 3)
    os.kill(workers_of(process)[0], signal.SIGKILL)
    assert process.wait(PATIENCE) == 0
    assert content(tmp_path / "out") == content(tmp_path / "quiet")
