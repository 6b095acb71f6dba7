"""Contradictions inside one examination are found, and plain examinations are left in peace."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta, timezone
from decimal import Decimal

import pytest

from fhirgallop.exam.catalogue import load
from fhirgallop.exam.checks import check, check_against_clock
from fhirgallop.exam.entry import Entry, Grade, Measure, Qualifier
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.exam.presence import Presence

CATALOGUE = load()


def pressure(finding, value, instance=""):
    return Entry(finding, measure=Measure(Decimal(value), "mm[Hg]"), instance=instance)


def rules(*entries):
    exam = Exam(Party("P-1"), "E-1", "", Moment("2026-11-30"), entries)
    return [issue.rule for issue in check(exam, CATALOGUE)]


grade_3 = Qualifier("grade", grade=Grade(3, 3, 6))

FAULTS = [
    ((), ["exam-without-entries"]),
    (
        (Entry("heart-sound.s4"), Entry("heart-sound.s4", Presence.ABSENT)),
        ["exam-present-and-absent"],
    ),
    ((Entry("murmur", Presence.ABSENT), Entry("murmur.systolic")), ["exam-kind-present-whole-absent"]),
    (
        (Entry("murmur.systolic", Presence.ABSENT, qualifiers=(grade_3,)),),
        ["exam-absent-but-described"],
    ),
    (
        (Entry("murmur.systolic", Presence.NOT_EXAMINED, qualifiers=(grade_3,)),),
        ["exam-absent-but-described"],
    ),
    (
        (Entry("murmur.systolic", Presence.NOT_EXAMINABLE, qualifiers=(grade_3,)),),
        ["exam-absent-but-described"],
    ),
    (
        (Entry("murmur.systolic", qualifiers=(Qualifier("grade", grade=Grade(7, 7, 6)),)),),
        ["exam-grade-range"],
    ),
    (
        (Entry("murmur.systolic", qualifiers=(Qualifier("grade", grade=Grade(3, 2, 6)),)),),
        ["exam-grade-range"],
    ),
    ((Entry("heart-sound.s4", qualifiers=(grade_3,)),), ["exam-qualifier-does-not-fit"]),
    (
        (pressure("pressure.systolic", 80), pressure("pressure.diastolic", 120)),
        ["exam-diastolic-above-systolic"],
    ),
    ((pressure("pressure.systolic", 1280),), ["exam-implausible-value"]),
    ((pressure("pressure.systolic", -5),), ["exam-impossible-value"]),
    ((pressure("pressure.systolic", 120), pressure("pressure.systolic", 130)), ["exam-entered-twice"]),
    (
        (Entry("vital.heart-rate", measure=Measure(Decimal(70), "/min", high=Decimal(80))),),
        ["exam-vital-sign-number"],
    ),
    ((Entry("vital.heart-rate", Presence.ABSENT),), ["exam-vital-sign-number"]),
]


@pytest.mark.parametrize(("entries", "expected"), FAULTS)
def test_a_contradiction_is_found(entries, expected):
    assert rules(*entries) == expected


PLAIN = [
    (Entry("heart-sound.s4"), Entry("heart-sound.s3", Presence.ABSENT)),
    (
        Entry("murmur"),
        Entry("murmur.systolic", qualifiers=(grade_3,)),
        Entry("murmur.diastolic", Presence.ABSENT),
    ),
    (Entry("murmur", Presence.ABSENT), Entry("murmur.systolic", Presence.NOT_EXAMINED)),
    (Entry("heart-sound.s4", Presence.ABSENT, qualifiers=(Qualifier("chamber", "left"),)),),
    (pressure("pressure.systolic", 120), pressure("pressure.diastolic", 80)),
    (pressure("pressure.systolic", 120, "left"), pressure("pressure.systolic", 130, "right")),
    (Entry("vital.heart-rate", Presence.NOT_EXAMINED), Entry("rhythm.pulse-deficit", Presence.ABSENT)),
    (Entry("murmur.systolic", instance="1"), Entry("murmur.systolic", Presence.ABSENT, instance="2")),
]


@pytest.mark.parametrize("entries", PLAIN)
def test_a_plain_examination_is_left_in_peace(entries):
    assert rules(*entries) == []


def test_an_implausible_value_is_only_a_warning_and_names_no_number():
    exam = Exam(Party("P-1"), "E-1", "", Moment("2026"), (pressure("pressure.systolic", 1280),))
    (issue,) = check(exam, CATALOGUE)
    assert issue.severity == "warning"
    assert "1280" not in issue.text


def test_the_local_fields_are_named():
    entries = (
        Entry("heart-sound.s4", fields=("s4_box",)),
        Entry("heart-sound.s4", Presence.ABSENT, fields=("gallop",)),
    )
    exam = Exam(Party("P-1"), "E-1", "", Moment("2026"), entries)
    (issue,) = check(exam, CATALOGUE)
    assert issue.field == "s4_box, gallop"


def dated(start, end="", *entries):
    return Exam(Party("P-1"), "E-1", "", Moment(start, end), entries or (Entry("heart-sound.s4"),))


NOW = datetime(2026, 12, 1, 8, 30, tzinfo=UTC)


@pytest.mark.parametrize(
    ("start", "end", "future"),
    [
        ("2026-12-01T09:30:00+01:00", "", False),
        ("2026-12-02T08:30:00Z", "", False),
        ("2026-12-02T08:30:01Z", "", True),
        ("2026-12-02T09:30:00+01:00", "", False),
        ("2026-12-02", "", False),
        ("2026-12-03", "", True),
        ("2026-12", "", False),
        ("2027-01", "", True),
        ("2026", "", False),
        ("2062", "", True),
        ("2026-11", "2027-01", True),
        ("2014-07", "2014-08", False),
    ],
)
def test_an_examination_in_the_future_is_flagged_and_kept(start, end, future):
    found = check_against_clock(dated(start, end), NOW)
    assert [(i.severity, i.rule) for i in found] == [("warning", "exam-in-the-future")] * future
    elsewhere = NOW.astimezone(timezone(timedelta(hours=13)))
    assert check_against_clock(dated(start, end), elsewhere) == found


@pytest.mark.parametrize(
    ("start", "end", "errors"),
    [
        ("1026-03-14", "", 1),
        ("0206-03-14T09:30:00Z", "", 1),
        ("1899-12-31", "", 1),
        ("1899", "", 1),
        ("1900", "", 0),
        ("1900-01-01", "", 0),
        ("1014-07", "2014-08", 1),
    ],
)
def test_a_mistyped_century_is_an_error_with_its_cure(start, end, errors):
    found = check(dated(start, end), CATALOGUE)
    assert [(i.severity, i.rule) for i in found] == [("error", "exam-before-1900")] * errors
    assert all("Correct it" in issue.text and start not in issue.text for issue in found)


def test_an_entry_of_its_own_mistyped_time_is_named():
    entry = Entry("echo.lvef", measure=Measure(Decimal(60), "%"), time="0026-03-12", fields=("echo.lvef",))
    (issue,) = check(dated("2026-03-14", "", entry), CATALOGUE)
    assert (issue.severity, issue.rule, issue.field) == ("error", "exam-before-1900", "echo.lvef")
