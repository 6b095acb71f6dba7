"""What a computation gives back: a result, a refusal or a grade, each naming what went into it.

Every number is a `decimal.Decimal`, worked with 28 significant digits and rounded only for display. Units are
UCUM codes. Nothing here is a diagnosis: a grade is what published cut-offs say about measurements.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from decimal import ROUND_HALF_UP, Context, Decimal
from typing import Final, Literal

Number = Decimal | int | float
Entry = Number | bool | str | None
State = Literal["met", "unmet", "unknown"]
ReasonKind = Literal["missing", "not-a-number", "out-of-range", "not-a-choice", "contradictory", "not-valid"]

UNKNOWN: Final = "unknown"
NOTICE = "Supports and does not replace clinical judgement; local protocols come first."

_EXPONENT_LIMIT = 30


@dataclass(frozen=True, slots=True)
class Given:
    """One named quantity that went into a result, or was derived on the way; unit is a UCUM code."""

    name: str
    value: Decimal | bool | str
    unit: str = ""


@dataclass(frozen=True, slots=True)
class Result:
    """A computed number with everything needed to check it.

    Attributes:
        computation: id in the registry, such as `pressure.mean-arterial`.
        label: what it is, in plain words.
        value: exact to 28 significant digits; `shown()` rounds for display.
        unit: UCUM code.
        decimals: places to show.
        formula: the formula in words and signs.
        inputs: every quantity and condition that was given.
        source: publication; `access` says how it was known (seen, memory, definition, common practice).
        caveats: limits that hold for this result.
        unrecorded: conditions under which it would have been refused, had anybody recorded them.
    """

    computation: str
    label: str
    value: Decimal
    unit: str
    decimals: int
    formula: str
    inputs: tuple[Given, ...]
    source: str
    access: str
    caveats: tuple[str, ...] = ()
    unrecorded: tuple[str, ...] = ()

    def shown(self) -> str:
        """The value rounded half up to the usual places; never use it to compute on."""
        return f"{self.value.quantize(Decimal(1).scaleb(-self.decimals), ROUND_HALF_UP):f}"


@dataclass(frozen=True, slots=True)
class Reason:
    """Why nothing was computed: the input concerned, the limit, and a sentence without the value given."""

    kind: ReasonKind
    input: str
    limit: str
    text: str


@dataclass(frozen=True, slots=True)
class Refusal:
    """Nothing was computed or graded; all reasons at once."""

    computation: str
    label: str
    reasons: tuple[Reason, ...]

    @property
    def missing(self) -> tuple[str, ...]:
        """Names of the inputs that were needed and not given."""
        return tuple(reason.input for reason in self.reasons if reason.kind == "missing")

    def __str__(self) -> str:
        return f"{self.label}: not computed. " + " ".join(reason.text for reason in self.reasons)


@dataclass(frozen=True, slots=True)
class Criterion:
    """One cut-off held against one measurement; unknown when the measurement was not given."""

    id: str
    state: State
    text: str
    input: str
    grade: str = ""
    access: str = ""

    @property
    def met(self) -> bool:
        """True only when the measurement is known and on the cut-off's side."""
        return self.state == "met"


@dataclass(frozen=True, slots=True)
class Grade:
    """A class that published cut-offs give to measurements, with every criterion used.

    Attributes:
        grade: one of the grades of the edition, or `unknown` when what is missing could decide.
        possible: every grade that the missing measurements still leave open, `grade` among them.
        discordant: two measurements point to different grades; the higher one is reported.
        derived: numbers worked out on the way (a score, an area).
        unrecorded: conditions under which it would have been refused, had anybody recorded them.
    """

    classification: str
    label: str
    grade: str
    possible: tuple[str, ...]
    criteria: tuple[Criterion, ...]
    discordant: bool
    inputs: tuple[Given, ...]
    derived: tuple[Given, ...]
    source: str
    access: str
    edition: str
    caveats: tuple[str, ...]
    unrecorded: tuple[str, ...]

    @property
    def known(self) -> bool:
        """True when the measurements given were enough for a grade."""
        return self.grade != UNKNOWN

    def criterion(self, name: str) -> Criterion:
        """The criterion with this id; KeyError when the edition does not use it."""
        for criterion in self.criteria:
            if criterion.id == name:
                return criterion
        raise KeyError(name)


def any_of(states: Iterable[State]) -> State:
    """Three-valued or: met as soon as one is met, unmet only when all are known and unmet."""
    seen = set(states)
    if "met" in seen:
        return "met"
    return "unknown" if "unknown" in seen or not seen else "unmet"


def all_of(states: Iterable[State]) -> State:
    """Three-valued and: unmet as soon as one is unmet, met only when all are known and met."""
    seen = set(states)
    if "unmet" in seen:
        return "unmet"
    return "unknown" if "unknown" in seen or not seen else "met"


def as_decimal(value: Number) -> Decimal | None:
    """The exact decimal of a number as printed (0.1 is 0.1); None for NaN, infinity or absurd exponents.

    Raises:
        TypeError: for a boolean, a text or anything else that is not a number.
    """
    if isinstance(value, bool) or not isinstance(value, Decimal | int | float):
        raise TypeError(f"a number is needed, not {type(value).__name__}")
    if isinstance(value, int) and value.bit_length() > _EXPONENT_LIMIT * 4:
        return None
    number = Decimal(float.__repr__(value)) if isinstance(value, float) else Decimal(value)
    if not number.is_finite() or abs(number.adjusted()) > _EXPONENT_LIMIT:
        return None
    return Context(prec=28).plus(number)
