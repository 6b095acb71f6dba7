"""An invented examination that uses every shape an entry can have."""

from __future__ import annotations

from dataclasses import replace
from decimal import Decimal

import pytest

from fhirgallop.exam.entry import Entry, Grade, Measure, Qualifier
from fhirgallop.exam.exam import Exam, MapVersion, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.exam.presence import Presence
from fhirgallop.observations.bundle import encode

ENTRIES = (
    Entry("heart-sound.s4", qualifiers=(Qualifier("chamber", "left"),), fields=("s4",), said="yes"),
    Entry("heart-sound.s3", Presence.ABSENT, fields=("s3",)),
    Entry("heart-sound.opening-snap", Presence.UNCERTAIN),
    Entry("heart-sound.pericardial-rub", Presence.NOT_EXAMINED),
    Entry("jvp.visible", Presence.NOT_EXAMINABLE, reason="dressing & line <neck>"),
    Entry("murmur"),
    Entry(
        "murmur.systolic",
        qualifiers=(
            Qualifier("grade", grade=Grade(2, 3, 6)),
            Qualifier("response.valsalva", "softer"),
            Qualifier("response.handgrip", "not-done"),
            Qualifier("site", "aortic"),
            Qualifier("site", "mitral"),
            Qualifier("timing", "mid-systolic"),
        ),
    ),
    Entry("heart-sound.s1-intensity", answers=("loud",)),
    Entry("pressure.systolic", measure=Measure(Decimal("120.0"), "mm[Hg]", original="16.0 kPa")),
    Entry("pressure.diastolic", measure=Measure(Decimal(84), "mm[Hg]")),
    Entry("vital.heart-rate", measure=Measure(Decimal(78), "/min")),
    Entry("jvp.height", measure=Measure(Decimal("3"), "cm", high=Decimal("4.50"))),
    Entry("echo.lvef", measure=Measure(Decimal(55), "%", comparator=">")),
    Entry("heart.narrative", text="S4 heard best in left lateral position."),
)


@pytest.fixture(scope="session")
def exam() -> Exam:
    """The examination."""
    return Exam(
        patient=Party("P-1", "https://fernwood.example/patients"),
        identifier="E-1",
        identifier_system="https://fernwood.example/examinations",
        time=Moment("2026-11-30T09:30:00+01:00"),
        entries=ENTRIES,
        encounter=Party("V-1", "https://fernwood.example/visits"),
        examiner=Party("staff-7", "https://fernwood.example/staff"),
        notes=("Patient tired.",),
        map=MapVersion("fernwood-heart-form", "2026.1"),
    )


@pytest.fixture
def coded(exam, moment):
    """Function: encodes the examination (changed by keyword) and gives Observations by finding id."""

    def run(entries=None, *, bundle=False, edition="R4", snomed=True, earlier=None, recorded=None, **changes):
        changed = (
            replace(exam, **changes) if entries is None else replace(exam, entries=tuple(entries), **changes)
        )
        made = encode(
            changed, form="json", recorded=recorded or moment, edition=edition, snomed=snomed, earlier=earlier
        )
        return made if bundle else by_finding(made)

    return run


def by_finding(bundle):
    """Observations of a Bundle by the catalogue id they carry."""
    found = {}
    for entry in bundle["entry"]:
        resource = entry["resource"]
        if resource["resourceType"] == "Observation":
            own = [
                c["code"] for c in resource["code"]["coding"] if c["system"].endswith("/CodeSystem/findings")
            ]
            found[own[0]] = resource
    return found
