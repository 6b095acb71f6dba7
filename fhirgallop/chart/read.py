"""From a patient's FHIR resources to the Context: the one way in.

Only what is known to be the patient's is read; what cannot be read is said, and stays unknown. Nothing raises
for what a chart holds.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import datetime
from types import MappingProxyType
from typing import Any, Final

from fhirgallop.chart import observation
from fhirgallop.chart.condition import read_condition
from fhirgallop.chart.equipment import read_devices, read_procedure
from fhirgallop.chart.gather import Found, gather
from fhirgallop.chart.log import Log
from fhirgallop.chart.person import read_person
from fhirgallop.chart.reading import Reading, by_place
from fhirgallop.chart.tables import Tables, shipped
from fhirgallop.chart.times import Times
from fhirgallop.chart.whose import recognise
from fhirgallop.exam.context import Context, Fact, Source
from fhirgallop.exam.exam import Exam
from fhirgallop.outcome import Issue

_READERS: Final[Mapping[str, Callable[[Found, Reading], None]]] = MappingProxyType(
    {
        "Observation": observation.read_observation,
        "DiagnosticReport": observation.read_report,
        "Condition": read_condition,
        "Procedure": read_procedure,
    }
)
_USES: Final = frozenset({"DeviceUseStatement", "DeviceUsage", "DeviceAssociation"})
# Read for what other resources point at them, or for whose they are.
_ASIDE: Final = frozenset({"Patient", "Encounter", "Device", *_USES})


@dataclass(frozen=True, slots=True)
class Chart:
    """What a chart gave.

    Attributes:
        context: the facts, for the review.
        issues: everything that could not be used or read as it was sent; never with a patient's data.
        resources: how many resources it held.
        unknown: how many of the patient's have no code that is known here, or are of a type that is not read.
    """

    context: Context
    issues: tuple[Issue, ...]
    resources: int
    unknown: int


def read_chart(
    chart: Any, exam: Exam, now: datetime, *, base: str = "", tables: Tables | None = None
) -> Chart:
    """The Context of the examination's patient.

    Args:
        chart: a Bundle (collection, searchset ...), a CDS Hooks prefetch, a list of resources or one,
            as parsed JSON of FHIR R4, R4B or R5.
        exam: today's examination: whose chart it is, which encounter, and the day the age is counted to.
        now: the moment of review, with a zone; what lies after it is not read.
        base: address of the FHIR server the chart comes from, where the chart itself does not tell.
        tables: codes of a site; the shipped ones when None.

    Raises:
        ValueError: `now` has no zone.
    """
    log = Log()
    return read_gathered(gather(chart, log), exam, now, log, base=base, tables=tables)


def read_gathered(
    all_: Sequence[Found],
    exam: Exam,
    now: datetime,
    log: Log,
    *,
    base: str = "",
    tables: Tables | None = None,
) -> Chart:
    """The same from resources that were gathered before; `log` takes what is wrong.

    Raises:
        ValueError: `now` has no zone.
    """
    if now.tzinfo is None:
        raise ValueError("now needs a zone")
    whose = recognise(exam.patient, all_, base, log)
    reading = Reading(tables or shipped(), whose, exam, Times(now, log), log, by_place(all_))
    ours = [found for found in all_ if _may_be_read(found, reading)]
    if whose.patient is not None:
        read_person(whose.patient, reading)
    for found in ours:
        reader = _READERS.get(found.type)
        if reader is not None:
            reader(found, reading)
        elif found.type not in _ASIDE:
            reading.unknown += 1
    uses = [found for found in ours if found.type in _USES]
    read_devices((found for found in ours if found.type == "Device"), uses, reading)
    if reading.unknown:
        words = f"{reading.unknown} resources say nothing that the rules know of; they were not used."
        log.add("information", "informational", "chart-unknown-codes", words)
    facts = tuple(_joined(reading.facts))
    return Chart(Context(now, facts, exam.patient), log.all(), len(all_), reading.unknown)


def _may_be_read(found: Found, reading: Reading) -> bool:
    """True for the patient's own resources; what is another's, or nobody's, is refused and said."""
    if found.type not in _READERS and found.type not in _ASIDE:
        return True
    owned = reading.whose.owns(found)
    if owned:
        return True
    if found.type == "Patient":
        return False
    if owned is None:
        if found.type in ("Device", "Encounter"):
            # in R5 a device names no patient: whose it is, its association says
            return False
        words = "It does not say whose it is; nothing of it is used. Send its subject."
        reading.log.add("warning", "required", "chart-no-patient", words, found.place)
    else:
        words = (
            "It is another patient's, or its patient cannot be followed to this one; nothing of it is used."
        )
        reading.log.add("error", "business-rule", "chart-other-patient", words, found.place)
    return False


def _joined(facts: list[Fact]) -> list[Fact]:
    """Several answers that one earlier examination gave to one question, as one fact, as they were given."""
    found: dict[Any, Fact] = {}
    for index, fact in enumerate(facts):
        key: Any = index
        if fact.source is Source.EARLIER_EXAM and fact.answers and fact.time:
            key = (fact.id, fact.state, fact.time, fact.encounter, fact.qualifiers)
        other = found.get(key)
        found[key] = (
            fact
            if other is None
            else replace(other, answers=tuple(dict.fromkeys((*other.answers, *fact.answers))))
        )
    return list(found.values())
