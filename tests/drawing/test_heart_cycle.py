"""What the drawing of the heart cycle shows, and what it never shows."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from datetime import UTC, datetime
from decimal import Decimal
from html import escape
from pathlib import Path
from typing import Any

import pytest
from defusedxml import ElementTree
from ruamel.yaml import YAML

from fhirgallop.drawing.cycle import A2, heart_cycle
from fhirgallop.drawing.heart_cycle import draw
from fhirgallop.drawing.wording import description
from fhirgallop.exam.context import Context, Fact, Source, State
from fhirgallop.exam.entry import Measure
from fhirgallop.exam.exam import Exam
from fhirgallop.exam.presence import Presence

CASES = YAML(typ="safe").load(
    (Path(__file__).parents[1] / "cases/drawing/exams.yaml").read_text(encoding="utf-8")
)
SVG = "{http://www.w3.org/2000/svg}"


@pytest.mark.parametrize("case", CASES, ids=lambda case: case["name"])
def test_what_was_said_is_drawn_and_told(case: dict[str, Any], exam: Callable[..., Exam]) -> None:
    cycle = heart_cycle(exam(*case["lines"]))
    drawing = draw(cycle)
    root = ElementTree.fromstring(drawing)
    texts = [node.text for node in root.iter(f"{SVG}text")]
    for text in case.get("drawn", ()):
        assert text in texts
    for sentence in case.get("told", ()):
        assert sentence in description(cycle)
    assert root.find(f"{SVG}desc").text == " ".join(description(cycle))
    assert {node.tag for node in root.iter()} <= {SVG + name for name in DRAWN_WITH}


DRAWN_WITH = ["svg", "title", "desc", "g", "defs", "pattern", "rect", "line", "path", "circle", "text"]


def test_it_stands_alone_and_is_named_for_those_who_do_not_see_it(exam: Callable[..., Exam]) -> None:
    drawing = draw(heart_cycle(exam("heart-sound.s4 present")), "A <b> & more")
    root = ElementTree.fromstring(drawing)
    assert root.get("role") == "img"
    named = {node.get("id") for node in root if node.tag in (f"{SVG}title", f"{SVG}desc")}
    assert set(root.get("aria-labelledby").split()) == named
    assert root.find(f"{SVG}title").text == "A <b> & more"
    assert escape("A <b> & more") in drawing
    assert "http" not in drawing.replace("http://www.w3.org/2000/svg", "")


def test_unsaid_sounds_guide_the_eye_and_are_not_told(exam: Callable[..., Exam]) -> None:
    cycle = heart_cycle(exam("heart-sound.s4 present"))
    first = next(beat for beat in cycle.strips[0].beats if beat.finding == "heart-sound.s1")
    assert first.presence is None
    assert not any("First heart sound" in sentence for sentence in description(cycle))


def test_absent_and_not_examined_are_drawn_differently(exam: Callable[..., Exam]) -> None:
    drawings = {
        said: draw(heart_cycle(exam(f"heart-sound.s3 {said}")))
        for said in ("present", "absent", "uncertain", "not-examined", "not-examinable")
    }
    assert len(set(drawings.values())) == len(drawings)


def test_no_atrial_beat_no_p_wave_and_an_unknown_one_is_asked(exam: Callable[..., Exam]) -> None:
    atria = {
        rhythm: heart_cycle(exam(f"rhythm.diagnosis {rhythm}")).atrium
        for rhythm in ("sinus-rhythm", "atrial-fibrillation", "other")
    }
    assert atria == {"sinus-rhythm": "beats", "atrial-fibrillation": "none", "other": "unknown"}
    assert heart_cycle(exam("heart-sound.s4 present")).atrium == "unknown"


def test_the_chart_gives_rhythm_and_pressure_with_source_and_day(exam: Callable[..., Exam]) -> None:
    facts = (
        Fact("rhythm.diagnosis", State.PRESENT, Source.ECG, ("atrial-fibrillation",), time="2026-03-14"),
        Fact("rhythm.diagnosis", State.PRESENT, Source.ECG, ("sinus-rhythm",), time="2020-01-02"),
        Fact("rhythm.diagnosis", State.REFUTED, Source.ECG, ("junctional",), time="2026-03-15"),
        Fact("catheter.lv-end-diastolic-pressure", State.PRESENT, Source.CATHETER,
             measure=Measure(Decimal(24), "mm[Hg]"), time="2026-02-01"),
    )  # fmt: skip
    cycle = heart_cycle(exam("heart-sound.s3 present"), Context(datetime(2026, 3, 14, tzinfo=UTC), facts))
    assert (cycle.rhythm, cycle.rhythm_source) == ("atrial-fibrillation", "ecg, 2026-03-14")
    assert cycle.pressure is not None
    assert cycle.pressure.source == "catheter, 2026-02-01"
    assert "end-diastolic 24 mmHg" in draw(cycle)


def test_a_measured_interval_places_the_snap(exam: Callable[..., Exam]) -> None:
    cycle = heart_cycle(exam("heart-sound.opening-snap present", "heart-sound.a2-os-interval 60"))
    snap = next(beat for beat in cycle.strips[0].beats if beat.finding == "heart-sound.opening-snap")
    assert snap.at == A2 + 60


def test_what_the_sender_took_back_is_not_drawn(exam: Callable[..., Exam]) -> None:
    said = exam("heart-sound.s4 present")
    taken = replace(said, entries=(replace(said.entries[0], withdrawn=True),))
    assert all(beat.finding != "heart-sound.s4" for beat in heart_cycle(taken).strips[0].beats)
    assert Presence.PRESENT in {beat.presence for beat in heart_cycle(said).strips[0].beats}
