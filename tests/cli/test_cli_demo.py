"""The demonstration goes the whole way: coded, judged, reviewed, delivered, shown as a card."""

from __future__ import annotations

import re
from typing import Any


def test_the_demonstration_goes_the_whole_way_and_cleans_up(run: Any, tmp_path: Any) -> None:
    done = run("demo", "--once", NO_COLOR="1", TMPDIR=str(tmp_path))
    assert (done.returncode, done.stderr) == (0, "")
    judged, delivered, cards = (part for part in re.split(r"\n\d\. ", done.stdout)[2:])
    told = judged.strip().splitlines()[1:]
    assert told
    assert all(line.startswith("information: ") for line in told)
    assert "34 Observation, 1 DiagnosticReport, 1 Provenance" in delivered
    assert "Observation/r-1/_history/1" in delivered
    assert "[warning]" in cards
    # what the card rests on is what was delivered, by the record system's own ids
    assert "Fourth heart sound: present" in cards
    assert re.search(r"Observation/r-\d+", cards)
    assert "review: Nothing was raised. That is no reassurance" in done.stdout
    assert list(tmp_path.iterdir()) == []
