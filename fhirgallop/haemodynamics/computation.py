"""A computation: a pure formula behind the checks of its row in `data/computations.csv`.

    @computation("pressure.pulse")
    def pulse_pressure(systolic_mmhg: Decimal, diastolic_mmhg: Decimal) -> Decimal | Stop: ...

    pulse_pressure(systolic_mmhg=120, diastolic_mmhg=80)  ->  Result 40 mm[Hg]

The formula sees checked decimals only; entries that merely limit its validity never reach it.
"""

from __future__ import annotations

import inspect
from collections.abc import Callable
from dataclasses import dataclass
from decimal import Decimal

from fhirgallop.errors import AssetError
from fhirgallop.haemodynamics.arithmetic import working_precision
from fhirgallop.haemodynamics.entries import admit, weigh
from fhirgallop.haemodynamics.tables import Condition, Formula, Input, load
from fhirgallop.haemodynamics.values import Entry, Reason, Refusal, Result


@dataclass(frozen=True, slots=True)
class Stop:
    """What a formula answers when its entries, each plausible, do not fit together."""

    input: str
    limit: str
    text: str


@dataclass(frozen=True, slots=True)
class Noted:
    """A number with cautions that only the formula can know."""

    value: Decimal
    cautions: tuple[str, ...]


Body = Callable[..., Decimal | Stop | Noted]


class Computation:
    """One published formula, called with named numbers in the units of their names."""

    def __init__(self, formula: Formula, body: Body) -> None:
        self.spec = formula
        self._body = body
        self._takes = tuple(inspect.signature(body).parameters)
        self.__doc__ = inspect.getdoc(body)
        tables = load()
        self.conditions: tuple[Condition, ...] = tables.conditions.get(formula.id, ())
        limiting = tuple(c.input for c in self.conditions)
        self.accepts: tuple[str, ...] = tuple(dict.fromkeys((*formula.needs, *formula.may_use, *limiting)))
        if not set(formula.needs) <= set(self._takes) <= set(self.accepts):
            raise AssetError(f"{formula.id}: the formula and its table row name different inputs")

    @property
    def id(self) -> str:
        """The id in the registry."""
        return self.spec.id

    @property
    def inputs(self) -> tuple[Input, ...]:
        """Every input it accepts, with unit and plausible range."""
        return tuple(load().inputs[name] for name in self.accepts)

    def __call__(self, **given: Entry) -> Result | Refusal:
        """Compute, or refuse with all reasons.

        Args:
            given: numbers by name in the unit of the name, yes/no conditions; None is unknown.

        Raises:
            TypeError: for a name it does not know, or a value of the wrong kind.
        """
        spec = self.spec
        entries, reasons = admit(spec.id, self.accepts, spec.needs, given)
        weighed = weigh(self.conditions, entries)
        reasons += weighed.reasons
        if reasons:
            return Refusal(spec.id, spec.label, tuple(reasons))
        with working_precision():
            answer = self._body(**{name: entries.values.get(name) for name in self._takes})
        if isinstance(answer, Stop):
            reason = Reason("contradictory", answer.input, answer.limit, answer.text)
            return Refusal(spec.id, spec.label, (reason,))
        noted = answer if isinstance(answer, Noted) else Noted(answer, ())
        return Result(
            computation=spec.id,
            label=spec.label,
            value=noted.value,
            unit=spec.unit,
            decimals=spec.decimals,
            formula=spec.formula,
            inputs=entries.given(),
            source=spec.source,
            access=spec.access,
            caveats=(*spec.cautions, *noted.cautions, *weighed.cautions),
            unrecorded=weighed.unrecorded,
        )

    def __repr__(self) -> str:
        return f"Computation({self.spec.id})"


def computation(name: str) -> Callable[[Body], Computation]:
    """Bind a formula to its row in computations.csv; AssetError when there is no such row."""
    formula = load().formulas.get(name)
    if formula is None:
        raise AssetError(f"computations.csv has no row {name}")
    return lambda body: Computation(formula, body)
