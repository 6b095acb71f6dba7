"""A classification: published cut-offs held against measurements, three-valued.

A measurement that is missing makes its criterion unknown, never unmet and never normal. What it could still
change stands in `Grade.possible`. Where two measurements disagree the higher grade is reported and marked
discordant.
"""

from __future__ import annotations

import inspect
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field
from decimal import Decimal

from fhirgallop.errors import AssetError, SettingsError
from fhirgallop.haemodynamics.arithmetic import working_precision
from fhirgallop.haemodynamics.entries import Entries, admit, on_side, weigh
from fhirgallop.haemodynamics.tables import Condition, Cutoffs, Input, Scheme, load
from fhirgallop.haemodynamics.values import UNKNOWN, Criterion, Entry, Given, Grade, Refusal, State


@dataclass(frozen=True, slots=True)
class Verdict:
    """What a classification's rule found; `Classification` adds inputs, source and cautions."""

    grade: str
    criteria: tuple[Criterion, ...]
    possible: tuple[str, ...] = ()
    discordant: bool = False
    derived: tuple[Given, ...] = ()
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Panel:
    """The measurements and the cut-offs in force, as a classification's rule sees them."""

    scheme: Scheme
    entries: Entries
    cutoffs: Cutoffs
    criteria: list[Criterion] = field(default_factory=list)

    def number(self, name: str) -> Decimal | None:
        """A measurement, or None when it is unknown."""
        return self.entries.number(name)

    def flag(self, name: str) -> bool | None:
        """A yes or no, or None when it is unknown."""
        return self.entries.flag(name)

    def choice(self, name: str) -> str:
        """A choice, or an empty text when it is unknown."""
        return self.entries.choice(name)

    def limit(self, cutoff_id: str) -> Decimal:
        """The number of a cut-off of this edition."""
        value = self.cutoffs.find(cutoff_id, self.scheme.edition).value
        if isinstance(value, bool):
            raise AssetError(f"cutoffs.csv: {cutoff_id} must be a number")
        return value

    def judge(self, cutoff_id: str, value: Decimal | None = None) -> Criterion:
        """Hold a cut-off against its input, or against a derived value; remembers the criterion."""
        cutoff = self.cutoffs.find(cutoff_id, self.scheme.edition)
        known: Decimal | bool | str | None = value
        if value is None and cutoff.input:
            known = self.entries.values.get(cutoff.input)
        label = load().inputs[cutoff.input].label if cutoff.input else cutoff.note
        text = f"{label}: {cutoff.words}"
        state: State = UNKNOWN
        if known is not None and not isinstance(known, str):
            state = "met" if on_side(known, cutoff.comparator, cutoff.value) else "unmet"
        criterion = Criterion(
            id=cutoff_id,
            state=state,
            text=text,
            input=cutoff.input,
            grade=cutoff.grade,
            access=cutoff.access,
        )
        self.criteria.append(criterion)
        return criterion

    def verdict(
        self,
        grade: str,
        *,
        possible: Iterable[str] = (),
        discordant: bool = False,
        derived: tuple[Given, ...] = (),
        notes: tuple[str, ...] = (),
    ) -> Verdict:
        """Close the panel: the criteria judged so far go with the grade."""
        return Verdict(
            grade, tuple(dict.fromkeys(self.criteria)), tuple(possible), discordant, derived, notes
        )


class Classification:
    """A classification in one or more editions, called with named measurements."""

    def __init__(self, schemes: tuple[Scheme, ...], rule: Callable[[Panel], Verdict]) -> None:
        self.schemes = {scheme.edition: scheme for scheme in schemes}
        self.default = next(scheme for scheme in schemes if scheme.is_default)
        self._rule = rule
        self.__doc__ = inspect.getdoc(rule)
        tables = load()
        self.conditions: tuple[Condition, ...] = tables.conditions.get(self.id, ())
        limiting = tuple(c.input for c in self.conditions)
        used = tuple(name for scheme in schemes for name in scheme.may_use)
        self.accepts: tuple[str, ...] = tuple(dict.fromkeys((*used, *limiting)))

    @property
    def id(self) -> str:
        """The id in the registry."""
        return self.default.id

    @property
    def editions(self) -> tuple[str, ...]:
        """The editions that can be chosen, in the order of the table."""
        return tuple(self.schemes)

    @property
    def inputs(self) -> tuple[Input, ...]:
        """Every input it accepts in any edition, with unit and plausible range."""
        return tuple(load().inputs[name] for name in self.accepts)

    def __call__(
        self, *, edition: str = "", cutoffs: Cutoffs | None = None, **given: Entry
    ) -> Grade | Refusal:
        """Grade, or refuse with all reasons.

        Args:
            edition: one of `editions`; the default edition when empty.
            cutoffs: a site's own cut-offs; the published ones when None.
            given: measurements by name in the unit of the name; None is unknown.

        Raises:
            SettingsError: for an edition that does not exist.
            TypeError: for a name it does not know, or a value of the wrong kind.
        """
        scheme = self.schemes.get(edition) if edition else self.default
        if scheme is None:
            raise SettingsError(f"{self.id} has the editions {', '.join(self.editions)}")
        entries, reasons = admit(self.id, self.accepts, (), given)
        weighed = weigh(self.conditions, entries)
        reasons += weighed.reasons
        if reasons:
            return Refusal(self.id, scheme.label, tuple(reasons))
        panel = Panel(scheme, entries, cutoffs or load().cutoffs)
        with working_precision():
            verdict = self._rule(panel)
        return Grade(
            classification=self.id,
            label=scheme.label,
            grade=verdict.grade,
            possible=_in_order(scheme, verdict),
            criteria=verdict.criteria,
            discordant=verdict.discordant,
            inputs=entries.given(),
            derived=verdict.derived,
            source=scheme.source,
            access=scheme.access,
            edition=scheme.edition,
            caveats=(*scheme.cautions, *verdict.notes, *weighed.cautions),
            unrecorded=weighed.unrecorded,
        )

    def __repr__(self) -> str:
        return f"Classification({self.id})"


def classification(name: str) -> Callable[[Callable[[Panel], Verdict]], Classification]:
    """Bind a rule to its rows in classifications.csv; AssetError when there are none."""
    schemes = load().schemes.get(name)
    if schemes is None:
        raise AssetError(f"classifications.csv has no row {name}")
    return lambda rule: Classification(schemes, rule)


def graded_by_measures(
    panel: Panel, extra: Sequence[Criterion] = (), skip: frozenset[str] = frozenset()
) -> Verdict:
    """The common ladder: each measure gives the highest grade it meets, the highest of all is reported.

    Args:
        panel: the measurements; every cut-off of the edition that names a grade is held against its input.
        extra: criteria judged beforehand for a special case.
        skip: ids of cut-offs that belong to such special cases.
    """
    ladder = panel.scheme.grades
    by_input: dict[str, list[Criterion]] = {}
    for cutoff in panel.cutoffs.of(panel.scheme.id, panel.scheme.edition):
        if cutoff.grade and cutoff.id not in skip:
            by_input.setdefault(cutoff.input, []).append(panel.judge(cutoff.id))
    for criterion in extra:
        by_input.setdefault(criterion.input, []).append(criterion)
    levels = [
        max(ladder.index(c.grade) for c in criteria if c.met)
        for criteria in by_input.values()
        if any(c.met for c in criteria)
    ]
    is_open = any(c.state == UNKNOWN for criteria in by_input.values() for c in criteria)
    if not levels:
        return panel.verdict(UNKNOWN, possible=ladder)
    top = max(levels)
    possible = ladder[top:] if is_open else ladder[top : top + 1]
    return panel.verdict(ladder[top], possible=possible, discordant=min(levels) != top)


def _in_order(scheme: Scheme, verdict: Verdict) -> tuple[str, ...]:
    if verdict.grade not in (*scheme.grades, UNKNOWN) or set(verdict.possible) - set(scheme.grades):
        raise AssetError(f"classifications.csv: {scheme.id} {scheme.edition} lacks a grade its rule gives")
    if verdict.possible:
        return tuple(grade for grade in scheme.grades if grade in verdict.possible)
    return scheme.grades if verdict.grade == UNKNOWN else (verdict.grade,)
