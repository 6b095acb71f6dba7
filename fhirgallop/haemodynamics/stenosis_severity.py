"""How severe a stenosis is by its measurements: aortic (two editions), aortic calcium, mitral.

The aortic difference between the editions: ACC/AHA 2020 calls a high velocity *or* a high mean gradient
severe, ESC/EACTS 2021 asks for both and a small area. Area and gradient that disagree are marked, not resolved.
"""

from __future__ import annotations

from fhirgallop.haemodynamics.classification import Panel, Verdict, classification
from fhirgallop.haemodynamics.values import UNKNOWN, Criterion, Given, State, all_of, any_of

_LADDER = ("at risk", "mild", "moderate", "severe", "very severe")
_STAGES_ABOVE = ("C1", "C2", "D1", "D2", "D3")
_CONFIRM = "Low-gradient severe stenosis by definition of the table: flow and measurements need confirmation."
_DISAGREE = "Area and gradient disagree: check flow (stroke volume index) and the outflow diameter."


@classification("aortic-stenosis.severity")
def aortic_severity(panel: Panel) -> Verdict:
    """Severity from velocity, mean gradient and area; flow and ejection fraction settle discord."""
    velocity = _level(panel, "as.velocity", ("mild", "moderate", "severe", "very-severe"))
    mean = _mean_level(panel)
    small = _small_area(panel, "as")
    low_flow = any_of((panel.judge("as.flow.low").state, panel.judge("as.ejection-fraction.reduced").state))
    panel.judge("as.dimensionless.severe")
    levels = [level for level in (velocity, mean) if level is not None]
    if not levels:
        return panel.verdict(UNKNOWN, notes=("Velocity and mean gradient are both unknown.",))
    top = max(levels)
    apart = len(set(levels)) > 1 and not (velocity == 0 and mean == 1)
    is_high = top >= _LADDER.index("severe")
    discordant = apart or (small == "met" and not is_high) or (small == "unmet" and is_high)
    if "indeterminate" in panel.scheme.grades:
        return _esc_severity(panel, levels, small, discordant=discordant)
    notes = (_DISAGREE,) if discordant and small != UNKNOWN else ()
    if small == "met" and not is_high and len(levels) == 2 and low_flow == "met":
        return panel.verdict("severe", discordant=True, notes=(_CONFIRM,))
    possible = {_LADDER[top]}
    if len(levels) < 2:
        possible |= set(_LADDER[top:])
    if small != "unmet" and not is_high and low_flow != "unmet":
        possible.add("severe")
    if velocity is None and mean == 1:
        possible.add("at risk")
    return panel.verdict(_LADDER[top], possible=possible, discordant=discordant, notes=notes)


def _esc_severity(panel: Panel, levels: list[int], small: State, *, discordant: bool) -> Verdict:
    """High-gradient severe needs velocity, mean gradient and area; some of them only is indeterminate."""
    marks = (*_states(panel, ("as.velocity.severe", "as.mean.severe")), small)
    top = max(levels)
    notes = (_DISAGREE,) if discordant and small != UNKNOWN else ()
    if all_of(marks) == "met":
        return panel.verdict(_LADDER[top])
    if all_of(marks) == UNKNOWN and any_of(marks) == "met":
        below = _LADDER[min(top, 2)]
        possible = {below, "indeterminate", "severe", _LADDER[top]}
        return panel.verdict(UNKNOWN, possible=possible, discordant=discordant, notes=notes)
    if any_of(marks) == "met":
        note = "Some, not all, marks of high-gradient severe stenosis are met: look at flow and calcium."
        return panel.verdict(
            "indeterminate", possible=("moderate", "indeterminate", "severe"), discordant=True, notes=(note,)
        )
    possible = {_LADDER[top]} | ({"indeterminate", "severe"} if UNKNOWN in marks else set())
    return panel.verdict(_LADDER[top], possible=possible, discordant=discordant, notes=notes)


@classification("aortic-stenosis.stage")
def aortic_stage(panel: Panel) -> Verdict:
    """Stage A to D3 of ACC/AHA 2020 from measurements, ejection fraction, flow and symptoms."""
    marks = (panel.judge("as-stage.velocity.severe").state, panel.judge("as-stage.mean.severe").state)
    high = any_of(marks)
    small = _small_area(panel, "as-stage")
    reduced = panel.judge("as-stage.ejection-fraction.reduced").state
    low_flow = panel.judge("as-stage.flow.low").state
    symptoms = panel.flag("symptoms")
    below = _stage_by_gradient(panel)
    if high == "met":
        return _high_gradient_stage(panel, symptoms, reduced)
    if below is None:
        return panel.verdict(UNKNOWN, notes=("Velocity and mean gradient are both unknown.",))
    low_gradient = _low_gradient_stages(symptoms, reduced, low_flow)
    unknown_high = set(_STAGES_ABOVE) if high == UNKNOWN else set()
    if small == "unmet":
        return panel.verdict(below, possible={below} | unknown_high)
    if small == UNKNOWN:
        return panel.verdict(below, possible={below} | unknown_high | (low_gradient - {""}))
    if high == UNKNOWN or len(low_gradient) > 1:
        possible = (low_gradient - {""}) | unknown_high | {below}
        return panel.verdict(UNKNOWN, possible=possible, discordant=True, notes=(_DISAGREE,))
    stage = next(iter(low_gradient))
    if not stage:
        return panel.verdict(below, discordant=True, notes=(_DISAGREE,))
    note = "Stage D2 also asks for confirmation at higher flow (from memory)." if stage == "D2" else _CONFIRM
    return panel.verdict(stage, discordant=True, notes=(note,))


@classification("aortic-stenosis.calcium")
def aortic_calcium(panel: Panel) -> Verdict:
    """Likelihood of severe stenosis by CT calcium (Agatston units); the limits differ by sex."""
    sex = panel.choice("sex")
    grades = {one: _calcium_grade(panel, one) for one in ((sex,) if sex else ("male", "female"))}
    chosen = set(grades.values())
    if len(chosen) == 1:
        return panel.verdict(chosen.pop())
    return panel.verdict(UNKNOWN, possible=chosen, notes=("The limits depend on sex.",))


@classification("mitral-stenosis.severity")
def mitral_severity(panel: Panel) -> Verdict:
    """Severity from area and pressure half-time; the half-time is left out where it is known to mislead."""
    disturbances = (
        "aortic_regurgitation_significant",
        "stiff_ventricle",
        "atrial_septal_defect",
        "valvotomy_within_72_h",
    )
    misleading = any(panel.flag(name) for name in disturbances)
    by_area = _mitral_level(panel.judge("ms.area.severe"), panel.judge("ms.area.very-severe"))
    by_time = _mitral_level(panel.judge("ms.half-time.severe"), panel.judge("ms.half-time.very-severe"))
    _judge_supporting_gradient(panel)
    notes: tuple[str, ...] = ()
    if misleading and by_time is not None:
        by_time, notes = None, ("The half-time is left out: it misleads in the conditions recorded.",)
    half_time = panel.number("mitral_half_time_ms")
    derived = (Given("mitral_area_by_half_time_cm2", 220 / half_time, "cm2"),) if half_time else ()
    levels = [level for level in (by_area, by_time) if level is not None]
    grades = panel.scheme.grades
    if not levels:
        return panel.verdict(UNKNOWN, derived=derived, notes=notes)
    top = max(levels)
    possible = grades[top:] if by_area is None else grades[top : top + 1]
    discordant = min(levels) != top
    return panel.verdict(grades[top], possible=possible, discordant=discordant, derived=derived, notes=notes)


def _states(panel: Panel, names: tuple[str, ...]) -> tuple[State, ...]:
    return tuple(panel.judge(name).state for name in names)


def _level(panel: Panel, stem: str, steps: tuple[str, ...]) -> int | None:
    """Place on the ladder by one measure: 0 when below every step, None when it is unknown."""
    criteria = [panel.judge(f"{stem}.{step}") for step in steps]
    if criteria[0].state == UNKNOWN:
        return None
    return sum(criterion.met for criterion in criteria)


def _mean_level(panel: Panel) -> int | None:
    """As `_level`, but a low mean gradient alone cannot tell mild stenosis from none: it counts as mild."""
    level = _level(panel, "as.mean", ("moderate", "severe", "very-severe"))
    return None if level is None else level + 1


def _small_area(panel: Panel, stem: str) -> State:
    return any_of(
        state
        for state in _states(panel, (f"{stem}.area.severe", f"{stem}.area-index.severe"))
        if state != UNKNOWN
    )


def _stage_by_gradient(panel: Panel) -> str | None:
    moderate = _states(panel, ("as-stage.velocity.moderate", "as-stage.mean.moderate"))
    mild = panel.judge("as-stage.velocity.mild")
    if any_of(moderate) == "met":
        return "B moderate"
    if mild.state == UNKNOWN:
        return "B mild" if panel.judge("as-stage.mean.moderate").state == "unmet" else None
    return "B mild" if mild.met else "A"


def _high_gradient_stage(panel: Panel, symptoms: bool | None, reduced: State) -> Verdict:
    if symptoms:
        return panel.verdict("D1")
    without = {"met": ("C2",), "unmet": ("C1",), "unknown": ("C1", "C2")}[reduced]
    if symptoms is None:
        return panel.verdict(UNKNOWN, possible=(*without, "D1"), notes=("Symptoms are not recorded.",))
    if len(without) == 1:
        return panel.verdict(without[0])
    return panel.verdict(UNKNOWN, possible=without, notes=("The ejection fraction is not recorded.",))


def _low_gradient_stages(symptoms: bool | None, reduced: State, low_flow: State) -> set[str]:
    """Stages open to a small area with a low gradient; the empty text stands for the stage by gradient."""
    if symptoms is False:
        return {""}
    stages: set[str] = set() if symptoms else {""}
    if reduced != "unmet":
        stages.add("D2")
    if reduced != "met":
        stages |= {"met": {"D3"}, "unmet": {""}, "unknown": {"D3", ""}}[low_flow]
    return stages


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
