"""Building the Bundle as plain dictionaries against serialising it; memory over many examinations."""

from __future__ import annotations

import resource
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import replace
from datetime import UTC, datetime
from decimal import Decimal
from pathlib import Path

from fhir.resources.R4B.bundle import Bundle as ModelBundle
from measuring import Row, at_least, at_most, interleaved, ratio

from fhirgallop.codes import fhirjson
from fhirgallop.exam.entry import Entry, Grade, Measure, Qualifier
from fhirgallop.exam.exam import Exam, MapVersion, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.exam.presence import Presence
from fhirgallop.observations.bundle import encode

MOMENT = datetime(2026, 12, 1, 8, 30, tzinfo=UTC)
SIGNS = (
    "heart-sound.s3", "heart-sound.opening-snap", "heart-sound.pericardial-rub", "murmur.diastolic",
    "general.pallor", "general.jaundice", "lung.crackles", "oedema.lower-limb", "cyanosis.central",
    "general.clubbing", "heave.right-ventricular", "thrill", "palpable.s4", "jvp.distension", "bruit.carotid",
)  # fmt: skip


def exam() -> Exam:
    """An invented examination of 25 entries."""
    absent = tuple(Entry(finding, Presence.ABSENT) for finding in SIGNS)
    grade = Qualifier("grade", grade=Grade(3, 3, 6))
    entries = (
        *absent,
        Entry("heart-sound.s4", qualifiers=(Qualifier("chamber", "left"),)),
        Entry("murmur"),
        Entry(
            "murmur.systolic",
            qualifiers=(grade, Qualifier("timing", "mid-systolic"), Qualifier("site", "aortic")),
        ),
        Entry("heart-sound.s1-intensity", answers=("normal",)),
        Entry("rhythm.diagnosis", answers=("sinus-rhythm",)),
        Entry("pressure.systolic", measure=Measure(Decimal(152), "mm[Hg]")),
        Entry("pressure.diastolic", measure=Measure(Decimal(84), "mm[Hg]")),
        Entry("vital.heart-rate", measure=Measure(Decimal(78), "/min")),
        Entry("jvp.height", measure=Measure(Decimal("4.0"), "cm")),
        Entry("echo.lvef", measure=Measure(Decimal(60), "%")),
    )
    return Exam(
        Party("P-1", "https://fernwood.example/patients"), "E-1", "https://fernwood.example/examinations",
        Moment("2026-11-30T09:30:00+01:00"), entries,
        examiner=Party("staff-7", "https://fernwood.example/staff"), map=MapVersion("fernwood", "2026.1"),
    )  # fmt: skip


def rows() -> Iterator[Row]:
    """The measured rows."""
    subject = exam()
    bundle = encode(subject, form="json", recorded=MOMENT, edition="R4B")
    text = fhirjson.write(bundle)
    times = interleaved(
        {
            "build": lambda: encode(subject, form="json", recorded=MOMENT, edition="R4B"),
            "write": lambda: fhirjson.write(bundle),
        }
    )
    yield at_most("build a Bundle of 25 entries / serialise it", ratio(times, "build", "write"), 5)
    times = interleaved(
        {
            "ours": lambda: fhirjson.write(encode(subject, form="json", recorded=MOMENT, edition="R4B")),
            "models": lambda: ModelBundle.model_validate_json(text).model_dump_json(),
        },
        rounds=5,
        calls=5,
    )
    yield at_least(
        "the model library reading and writing it / we building and writing it",
        ratio(times, "models", "ours"),
        25,
    )
    yield at_most("peak memory of 10,000 examinations / 1,000", _peak(10_000) / _peak(1_000), 1.05)


def _peak(count: int) -> int:
    """Largest resident memory, in kilobytes, of a fresh process that codes `count` examinations."""
    command = [sys.executable, str(Path(__file__).resolve()), str(count)]
    return int(subprocess.run(command, check=True, capture_output=True, text=True).stdout)


def _code(count: int) -> None:
    subject = exam()
    for number in range(count):
        fhirjson.write(encode(replace(subject, identifier=f"E-{number}"), form="json", recorded=MOMENT))
    print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)


if __name__ == "__main__":
    _code(int(sys.argv[1]))
