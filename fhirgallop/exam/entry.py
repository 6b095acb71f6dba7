"""Entry: one thing said in an examination about one finding, with its qualifiers and measure."""

from __future__ import annotations

from dataclasses import dataclass, replace
from decimal import Decimal

from fhirgallop.exam.presence import Presence


@dataclass(frozen=True, slots=True)
class Grade:
    """A murmur grade with its denominator: III/VI is low 3, high 3, of 6; `2-3/6` is low 2, high 3, of 6."""

    low: int
    high: int
    of: int

    def __str__(self) -> str:
        return f"{self.low}/{self.of}" if self.low == self.high else f"{self.low}-{self.high}/{self.of}"


@dataclass(frozen=True, slots=True)
class Qualifier:
    """A property of a finding on one axis: a catalogued value, a grade, or the clinician's own words."""

    axis: str
    value: str = ""
    grade: Grade | None = None
    text: str = ""


@dataclass(frozen=True, slots=True)
class Measure:
    """A number in the finding's canonical unit; a range has `high`, a limit has a `comparator`.

    `original` keeps what was sent where it was converted (`16.0 kPa`).
    """

    value: Decimal
    unit: str
    comparator: str = ""
    high: Decimal | None = None
    original: str = ""


@dataclass(frozen=True, slots=True)
class Entry:
    """One entry of an examination.

    Attributes:
        finding: catalogue id.
        presence: what was said; a measured or chosen value counts as present.
        answers: axis value ids, for a choice finding.
        measure: the number, for a quantity finding.
        text: the words, for a text finding, or an answer in the clinician's own words.
        qualifiers: sorted by axis, then value.
        instance: tells two entries of one finding apart (`1`, `left`); empty when there is one.
        reason: why it was not, or could not be, examined.
        notes: remarks, as written.
        withdrawn: the sender took this entry back (it becomes entered-in-error).
        time: the entry's own moment (FHIR dateTime), empty for the examination's.
        fields: names of the local fields it was read from.
        said: the local wording that was chosen, where the map names a local code system.
        apart: of a box that may hold several answers, each answer as an entry of its own; it is coded and
            known again by its answer, also where there is only one.
        words: the words of a line of text that it was read from; empty for a box.
        preliminary: read from a line of text, and the map says that such a reading waits for a person.
    """

    finding: str
    presence: Presence = Presence.PRESENT
    answers: tuple[str, ...] = ()
    measure: Measure | None = None
    text: str = ""
    qualifiers: tuple[Qualifier, ...] = ()
    instance: str = ""
    reason: str = ""
    notes: tuple[str, ...] = ()
    withdrawn: bool = False
    time: str = ""
    fields: tuple[str, ...] = ()
    said: str = ""
    apart: tuple[Entry, ...] = ()
    words: str = ""
    preliminary: bool = False

    def by_answer(self) -> tuple[Entry, ...]:
        """What is coded: each of several answers by itself (FHIR: one value, one Observation)."""
        if self.apart or len(self.answers) < 2:
            return self.apart or (self,)
        return tuple(
            replace(self, answers=(answer,), instance=f"{self.instance}/{answer}") for answer in self.answers
        )

    @property
    def key(self) -> tuple[str, str]:
        """What makes it the same entry when the examination is sent again."""
        return (self.finding, self.instance)
