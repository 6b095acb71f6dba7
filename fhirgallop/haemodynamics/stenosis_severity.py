"""How severe a stenosis is by its measurements: aortic (two editions), aortic calcium, mitral.

The aortic difference between the editions: ACC/AHA 2020 calls a high velocity *or* a high mean gradient
severe, ESC/EACTS 2021 asks for both and a small area. Area and gradient that disagree are marked, not
resolved.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import product

from fhirgallop.haemodynamics.classification import Panel, Verdict, classification
from fhirgallop.haemodynamics.values import UNKNOWN, Criterion, Given, State, all_of, any_of

_LADDER = ("at risk", "mild", "moderate", "severe", "very severe")
_SEVERE = 3
_CONFIRM = "Low-gradient severe stenosis by definition of the table: flow and measurements need confirmation."
_DISAGREE = "Area and gradient disagree: check flow (stroke volume index) and the outflow diameter."
_PARTLY = "Some, not all, marks of high-gradient severe stenosis are met: look at flow and calcium."
_NO_GRADIENT = "Velocity and mean gradient are both unknown."
_BOTH = (True, False)
_HALF_TIME_DISTURBANCES = (
    "aortic_regurgitation_significant",
    "stiff_ventricle",
    "atrial_septal_defect",
    "valvotomy_within_72_h",
)


@dataclass(frozen=True, slots=True)
class _Gradients:
    """Places on the ladder by velocity (0 to 4) and by mean gradient (1 to 4), None where unknown."""

    velocity: int | None
    mean: int | None
    highest: int = _SEVERE + 1

    @property
    def top(self) -> int | None:
        """The higher place of those known; a low mean gradient does not lift a normal velocity."""
        if self.velocity is None or self.mean is None:
            return self.velocity if self.mean is None else self.mean
        return 0 if self.velocity == 0 and self.mean == 1 else max(self.velocity, self.mean)

    @property
    def disagree(self) -> bool:
        """Both are known and stand on different places."""
        return None not in (self.velocity, self.mean) and self.top != 0 and self.velocity != self.mean

    def completions(self) -> Iterator[_Gradients]:
        """Every way in which what is unknown could turn out."""
        velocities = range(self.highest + 1) if self.velocity is None else (self.velocity,)
        means = range(1, self.highest + 1) if self.mean is None else (self.mean,)
        for velocity, mean in product(velocities, means):
            yield _Gradients(velocity, mean, self.highest)


@classification("aortic-stenosis.severity")
def aortic_severity(panel: Panel) -> Verdict:
    """Severity from velocity, mean gradient and area; flow and ejection fraction settle discord."""
    gradients = _Gradients(
        _level(panel, "as.velocity", ("mild", "moderate", "severe", "very-severe")),
        _level(panel, "as.mean", ("moderate", "severe", "very-severe"), lowest=1),
    )
    small, strictly_small = _small_area(panel, "as")
    low_flow = any_of(_states(panel, ("as.flow.low", "as.ejection-fraction.reduced")))
    panel.judge("as.dimensionless.severe")
    decide = _severity_esc if "indeterminate" in panel.scheme.grades else _severity_acc
    possible = {
        decide(case, is_small, is_low)
        for case in gradients.completions()
        for is_small, is_low in product(_either(strictly_small), _either(low_flow))
    }
    top = gradients.top
    if top is None:
        return panel.verdict(UNKNOWN, possible=possible, notes=(_NO_GRADIENT,))
    against = (small == "met" and top < _SEVERE) or (small == "unmet" and top >= _SEVERE)
    found, notes = _known_severity(panel, gradients, small, low_flow)
    return panel.verdict(
        found,
        possible=possible | ({found} - {UNKNOWN}),
        discordant=against or gradients.disagree,
        notes=(*((_DISAGREE,) if against else ()), *notes),
    )


def _known_severity(
    panel: Panel, gradients: _Gradients, small: State, low_flow: State
) -> tuple[str, tuple[str, ...]]:
    """The grade of what was measured: the highest that a known measurement gives."""
    top = gradients.top or 0
    if "indeterminate" not in panel.scheme.grades:
        is_complete = gradients.velocity is not None and gradients.mean is not None
        if small == "met" and top < _SEVERE and low_flow == "met" and is_complete:
            return "severe", (_CONFIRM,)
        return _LADDER[top], ()
    levels = (gradients.velocity, gradients.mean)
    marks: list[State] = [UNKNOWN if n is None else "met" if n >= _SEVERE else "unmet" for n in levels]
    marks.append(small)
    if any_of(marks) != "met" or all_of(marks) == "met":
        return _LADDER[top], ()
    return (UNKNOWN, ()) if all_of(marks) == UNKNOWN else ("indeterminate", (_PARTLY,))


def _severity_acc(gradients: _Gradients, is_small: bool, is_low_flow: bool) -> str:
    top = gradients.top or 0
    return "severe" if is_small and is_low_flow and top < _SEVERE else _LADDER[top]


def _severity_esc(gradients: _Gradients, is_small: bool, is_low_flow: bool) -> str:  # noqa: ARG001 - one signature
    """High-gradient severe needs velocity, mean gradient and area; some of them only is indeterminate."""
    marks = ((gradients.velocity or 0) >= _SEVERE, (gradients.mean or 0) >= _SEVERE, is_small)
    return "indeterminate" if any(marks) and not all(marks) else _LADDER[gradients.top or 0]


@classification("aortic-stenosis.stage")
def aortic_stage(panel: Panel) -> Verdict:
    """Stage A to D3 of ACC/AHA 2020 from measurements, ejection fraction, flow and symptoms."""
    gradients = _Gradients(
        _level(panel, "as-stage.velocity", ("mild", "moderate", "severe")),
        _level(panel, "as-stage.mean", ("moderate", "severe"), lowest=1),
        highest=_SEVERE,
    )
    small, strictly_small = _small_area(panel, "as-stage")
    symptoms = panel.flag("symptoms")
    judged = _states(panel, ("as-stage.ejection-fraction.reduced", "as-stage.flow.low"))
    others = list(product(_BOTH if symptoms is None else (symptoms,), *map(_either, judged)))
    possible = {
        _stage(case.top or 0, is_small, *other)
        for case in gradients.completions()
        for is_small in _either(strictly_small)
        for other in others
    }
    top = gradients.top
    if top is None:
        return panel.verdict(UNKNOWN, possible=possible, notes=(_NO_GRADIENT,))
    found = {_stage(top, small == "met", *other) for other in others}
    against = (small == "met" and top < _SEVERE) or (small == "unmet" and top >= _SEVERE)
    notes = (_DISAGREE,) if against else ()
    is_complete = gradients.velocity is not None and gradients.mean is not None
    if len(found) > 1 or (small == "met" and top < _SEVERE and not is_complete):
        return panel.verdict(UNKNOWN, possible=possible, discordant=against, notes=notes)
    stage = found.pop()
    if stage in ("D2", "D3"):
        notes = (_CONFIRM,)
    return panel.verdict(
        stage, possible=possible | {stage}, discordant=against or gradients.disagree, notes=notes
    )


def _stage(top: int, is_small: bool, symptoms: bool, is_reduced: bool, is_low_flow: bool) -> str:
    """The stage when everything is known."""
    if top >= _SEVERE:
        return "D1" if symptoms else "C2" if is_reduced else "C1"
    if is_small and symptoms and (is_reduced or is_low_flow):
        return "D2" if is_reduced else "D3"
    return ("A", "B mild", "B moderate")[top]


@classification("aortic-stenosis.calcium")
def aortic_calcium(panel: Panel) -> Verdict:
    """Likelihood of severe stenosis by CT calcium (Agatston units); the limits differ by sex."""
    sex = panel.choice("sex")
    grades = {one: _calcium_grade(panel, one) for one in ((sex,) if sex else ("male", "female"))}
    chosen = set(grades.values())
    if len(chosen) == 1:
        return panel.verdict(chosen.pop())
    return panel.verdict(UNKNOWN, possible=chosen - {UNKNOWN}, notes=("The limits depend on sex.",))


@classification("mitral-stenosis.severity")
def mitral_severity(panel: Panel) -> Verdict:
    """Severity from area and pressure half-time; the half-time is left out where it is known to mislead."""
    disturbances = [panel.flag(name) for name in _HALF_TIME_DISTURBANCES]
    by_area = _mitral_level(panel.judge("ms.area.severe"), panel.judge("ms.area.very-severe"))
    by_time = _mitral_level(panel.judge("ms.half-time.severe"), panel.judge("ms.half-time.very-severe"))
    _judge_supporting_gradient(panel)
    notes: tuple[str, ...] = ()
    if any(disturbances) and by_time is not None:
        notes = ("The half-time is left out: it misleads in the conditions recorded.",)
    used_time = None if any(disturbances) else by_time
    half_time = panel.number("mitral_half_time_ms")
    derived = (Given("mitral_area_by_half_time_cm2", 220 / half_time, "cm2"),) if half_time else ()
    levels = [level for level in (by_area, used_time) if level is not None]
    grades = panel.scheme.grades
    if not levels:
        return panel.verdict(UNKNOWN, derived=derived, notes=notes)
    may_use_time = (False,) if any(disturbances) else _BOTH if None in disturbances else (True,)
    places = range(len(grades))
    possible = {
        grades[max(area, time) if uses_time else area]
        for area in (places if by_area is None else (by_area,))
        for time in (places if by_time is None else (by_time,))
        for uses_time in may_use_time
    }
    found, discordant = grades[max(levels)], len(set(levels)) > 1
    return panel.verdict(found, possible=possible, discordant=discordant, derived=derived, notes=notes)


def _states(panel: Panel, names: tuple[str, ...]) -> tuple[State, ...]:
    return tuple(panel.judge(name).state for name in names)


def _level(panel: Panel, stem: str, steps: tuple[str, ...], *, lowest: int = 0) -> int | None:
    """Place on the ladder by one measure, from `lowest` when below every step; None when it is unknown.

    A low mean gradient alone cannot tell mild stenosis from none: its lowest place is mild.
    """
    criteria = [panel.judge(f"{stem}.{step}") for step in steps]
    if criteria[0].state == UNKNOWN:
        return None
    return lowest + sum(criterion.met for criterion in criteria)


def _small_area(panel: Panel, stem: str) -> tuple[State, State]:
    """Small by area or indexed area: by those measured, and strictly, where a missing one leaves it open."""
    states = _states(panel, (f"{stem}.area.severe", f"{stem}.area-index.severe"))
    return any_of(state for state in states if state != UNKNOWN), any_of(states)


def _either(state: State) -> tuple[bool, ...]:
    return _BOTH if state == UNKNOWN else (state == "met",)


def _calcium_grade(panel: Panel, sex: str) -> str:
    very_likely, likely, unlikely = (
        panel.judge(f"as-calcium.{step}.{sex}") for step in ("very-likely", "likely", "unlikely")
    )
    if likely.state == UNKNOWN:
        return UNKNOWN
    if very_likely.met:
        return "very likely"
    if likely.met:
        return "likely"
    return "unlikely" if unlikely.met else "between"


def _mitral_level(severe: Criterion, very_severe: Criterion) -> int | None:
    return None if severe.state == UNKNOWN else severe.met + very_severe.met


def _judge_supporting_gradient(panel: Panel) -> None:
    """The mean gradient supports severity at 60 to 80 beats a minute only, and never decides."""
    if all_of(_states(panel, ("ms.rate.low", "ms.rate.high"))) == "met":
        panel.judge("ms.mean.supporting")
