"""The command as a person meets it: help with the exit codes, colours, progress."""

from __future__ import annotations

import os
import pty
import re
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

PLAIN = {name: value for name, value in os.environ.items() if name not in ("NO_COLOR", "FORCE_COLOR")}
COLOUR = re.compile(rb"\x1b\[[0-9;]*3[0-7]m")


@pytest.mark.parametrize(
    ("words", "codes"),
    [
        ([], "01234"),
        (["code"], "01234"),
        (["map", "check"], "013"),
        (["demo"], "014"),
        (["serve"], "034"),
    ],
)
def test_help_says_the_exit_codes(run: Any, words: list[str], codes: str) -> None:
    done = run(*words, "--help", COLUMNS="200", NO_COLOR="1")
    assert done.returncode == 0
    (listed,) = " ".join(done.stdout.split()).split("Exit codes: ")[1:]
    for code in codes:
        assert f"{code} " in listed


def test_no_words_or_wrong_ones_are_a_wrong_call(call: Any) -> None:
    assert call().code == 2
    assert call("frobnicate").code == 2
    assert call("map").code == 2


def test_colour_only_for_a_terminal_that_wants_it() -> None:
    """NO_COLOR (no-color.org): "when present and not an empty string", no colour is added."""
    words = [sys.executable, "-m", "fhirgallop", "code", "--help"]
    assert COLOUR.search(_on_a_terminal(words, {**PLAIN, "TERM": "xterm-256color"}))
    for quiet in ({"NO_COLOR": "1", "TERM": "xterm-256color"}, {"TERM": "dumb"}):
        seen = _on_a_terminal(words, {**PLAIN, **quiet})
        assert b"The template map" in seen
        assert not COLOUR.search(seen)


def test_progress_is_shown_to_a_person_alone(ehr: Path, fernwood: Path, tmp_path: Path) -> None:
    record, out = ehr / "fernwood-exam.json", tmp_path / "out.ndjson"
    words = [sys.executable, "-m", "fhirgallop", "code", *[str(record)] * 20, "--map", str(fernwood)]
    words += ["--out", str(out)]
    seen = _on_a_terminal(words, {**PLAIN, "TERM": "xterm-256color"})
    assert re.search(rb"\d+ examinations.*0:00:", seen)
    assert b"20 examinations: 20 coded" in seen
    piped = subprocess.run(words, capture_output=True, check=False, timeout=60, env=PLAIN)
    assert piped.stderr.decode() == "20 examinations: 20 coded, 0 refused, 0 unreadable\n"


def _on_a_terminal(words: list[str], env: dict[str, str]) -> bytes:
    """What a command shows on a terminal of its own."""
    ours, theirs = pty.openpty()
    running = subprocess.Popen(words, stdin=theirs, stdout=theirs, stderr=theirs, env=env)
    os.close(theirs)
    seen = bytearray()
    try:
        while part := os.read(ours, 65536):
            seen += part
    except OSError:  # the other end is closed: Linux says so with EIO
        pass
    finally:
        os.close(ours)
    running.wait(60)
    return bytes(seen)
