"""Age at the examination, and sex, from the patient's own resource.

Source: FHIR R4 Patient.birthDate (a date that may be partial), Patient.gender (administrative).
"""

from __future__ import annotations

from datetime import date
from decimal import Decimal
from typing import Final

from fhirgallop.chart.elements import text
from fhirgallop.chart.gather import Found
from fhirgallop.chart.reading import Reading
from fhirgallop.exam import moment
from fhirgallop.exam.context import Fact, Source, State
from fhirgallop.exam.entry import Measure

_SEXES: Final = ("female", "male")
_YEAR_DAYS: Final = Decimal("365.25")


def read_person(patient: Found, reading: Reading) -> None:
    """Adds age and sex."""
    born, day = text(patient.resource.get("birthDate")), reading.exam.time.start[:10]
    if not reading.exam.time.precise_to_day:
        day = reading.times.now.isoformat()[:10]
    parsed = moment.parse(born) if born else "missing"
    place = f"{patient.place}.birthDate"
    if isinstance(parsed, str) or parsed.has_clock:
        words = "There is no date of birth that can be read; the age stays unknown."
        reading.log.add("warning", "incomplete", "chart-birth-date", words, place)
    elif parsed.start > day[: len(parsed.start)]:
        words = "The date of birth lies after the examination; the age stays unknown. Correct it."
        reading.log.add("error", "business-rule", "chart-birth-date", words, place)
    else:
        _add(reading, patient, "patient.age", number=age(parsed.start, day))
    gender = text(patient.resource.get("gender"))
    if gender in _SEXES:
        _add(reading, patient, "patient.sex", answers=(gender,))


def age(born: str, day: str) -> Measure:
    """Age in years on a day, both written as FHIR dates: completed years, and days as a fraction below two.

    A birth date without month or day gives the range of ages that are possible.
    """
    year, *rest = born.split("-")
    first = date(int(year), int(rest[0]) if rest else 1, int(rest[1]) if len(rest) > 1 else 1)
    on = date.fromisoformat(day)
    if len(born) == 10:
        return Measure(_years(first, on), "a")
    months = 12 if len(born) == 4 else 1
    month = first.month - 1 + months
    after = (
        first.replace(year=first.year + month // 12, month=month % 12 + 1)
        if first.year < date.max.year
        else date.max
    )
    last = min(date.fromordinal(after.toordinal() - 1), on)
    low, high = _years(last, on), _years(first, on)
    return Measure(low, "a", high=high) if low != high else Measure(low, "a")


def _years(born: date, on: date) -> Decimal:
    whole = on.year - born.year - ((on.month, on.day) < (born.month, born.day))
    if whole < 2:
        return (Decimal((on - born).days) / _YEAR_DAYS).quantize(Decimal("0.001"))
    return Decimal(whole)


def _add(
    reading: Reading, patient: Found, id_: str, answers: tuple[str, ...] = (), number: Measure | None = None
) -> None:
    reading.facts.append(
        Fact(id_, State.PRESENT, Source.DEMOGRAPHICS, answers, number, reference=patient.name)
    )
