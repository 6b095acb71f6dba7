"""Times of an examination: precision is kept, a clock time needs a zone."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fhirgallop.exam.moment import Moment, parse


@pytest.mark.parametrize("text", ["2026", "2026-03", "2026-03-14", "2024-02-29"])
def test_dates_keep_their_precision(text):
    assert parse(text) == Moment(text)


@pytest.mark.parametrize(
    ("text", "zone", "start"),
    [
        ("2026-03-14T09:30:00+01:00", "", "2026-03-14T09:30:00+01:00"),
        ("2026-03-14 09:30", "+01:00", "2026-03-14T09:30:00+01:00"),
        ("2026-03-14T09:30Z", "+01:00", "2026-03-14T09:30:00Z"),
        ("2026-03-14T09:30:12.250+0530", "", "2026-03-14T09:30:12.250+05:30"),
    ],
)
def test_clock_times_carry_a_zone(text, zone, start):
    assert parse(text, zone=zone) == Moment(start)


@pytest.mark.parametrize(
    "text",
    [
        "",
        "yesterday",
        "2026-02-30",
        "2026-13",
        "14.03.2026",
        "2026-03-14T25:00Z",
        "2026-03-14T09:30:00+99:00",
    ],
)
def test_other_texts_are_explained(text):
    assert isinstance(parse(text, zone="Z"), str)


def test_a_clock_time_without_zone_is_refused():
    assert "zone" in parse("2026-03-14T09:30:00")


@given(st.text(max_size=40))
def test_no_text_ever_raises(text):
    assert isinstance(parse(text), Moment | str)


def test_only_a_day_is_precise_to_the_day():
    assert Moment("2026-03-14").precise_to_day
    assert not Moment("2026-03").precise_to_day


@pytest.mark.parametrize(
    ("one", "other", "after"),
    [
        ("2026-03-15", "2026-03-14T23:59:00+01:00", True),
        ("2026-03-14", "2026-03-14T09:30:00+01:00", False),
        ("2026-04", "2026-03-14", True),
        ("2026", "2026-03-14", False),
        ("2026-03-14T09:31:00+02:00", "2026-03-14T09:00:00+01:00", False),
        ("2026-03-14T09:00:00Z", "2026-03-14T09:30:00+01:00", True),
        ("2026-03-14T09:30:00+01:00", "2026-03-14T09:30:00+01:00", False),
    ],
)
def test_what_is_later_as_far_as_the_coarser_tells(one, other, after):
    assert Moment(one).after(Moment(other)) is after


def test_later_than_a_span_is_later_than_its_end():
    assert not Moment("2014-08-10").after(Moment("2014-07", "2014-08"))
    assert Moment("2014-09-01").after(Moment("2014-07", "2014-08"))
