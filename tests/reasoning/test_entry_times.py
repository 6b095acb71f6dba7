"""A number that the form dates to another day is as old as its own day, not as the examination."""

from __future__ import annotations

from datetime import UTC, datetime
from decimal import Decimal

import pytest

from fhirgallop.exam.context import Context
from fhirgallop.exam.entry import Entry, Measure
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.reasoning.items import collect

DAY = 24 * 3600


def item_of(time: str):
    entry = Entry("echo.lvef", measure=Measure(Decimal(30), "%"), time=time)
    exam = Exam(Party("P-1"), "E-1", "", Moment("2026-11-30T10:00:00+01:00"), (entry,))
    table = collect(exam, Context(datetime(2026, 11, 30, 12, tzinfo=UTC), (), exam.patient))
    return table.by_id.get("echo.lvef", ()), table.unusable


def test_without_a_time_of_its_own_it_is_of_the_examination():
    (item,), _ = item_of("")
    assert (item.age, item.clock, item.encounter) == (0, True, True)


@pytest.mark.parametrize(
    ("time", "days", "clock"), [("2026-10-31", 30, False), ("2024-11-30T09:00:00Z", 730, True)]
)
def test_an_older_number_has_its_own_age(time, days, clock):
    (item,), _ = item_of(time)
    assert item.age // DAY == days
    assert item.clock is clock
    assert item.encounter is None


def test_a_number_from_the_future_is_not_used():
    used, unusable = item_of("2027-01-01")
    assert not used
    assert len(unusable) == 1
