"""Arithmetic and range checks between recorded numbers: `holds`, `ask` (have another look) or `broken`.

`broken` is kept for what cannot be: numbers that contradict a definition. Everything softer is `ask`. A
number that was not recorded leaves the check unknown. Values are taken as entered, never corrected.
"""

from __future__ import annotations

from decimal import Decimal

from fhirgallop.haemodynamics.classification import Panel, Verdict, classification
from fhirgallop.haemodynamics.values import UNKNOWN, Criterion, Grade, any_of

_ASK_FOR_UNIT = "Ask for the unit: the number fits kilopascal."
_DEFAULT_SCALE = Decimal(6)


@classification("check.opening-snap-interval")
def opening_snap_interval(panel: Panel) -> Verdict:
    """A2 to opening snap in ms: outside the range it is probably another sound, or a slip of the unit."""
    return _ask_if_any(panel, [panel.judge("check.snap.short"), panel.judge("check.snap.long")])


@classification("check.murmur-grade")
def murmur_grade(panel: Panel) -> Verdict:
    """A murmur grade against its own scale (six steps unless stated); between two grades is asked."""
    grade = panel.number("murmur_grade")
    below = panel.judge("check.murmur.lowest")
    if grade is None:
        return panel.verdict(UNKNOWN)
    scale = panel.number("murmur_scale")
    if grade > (scale or _DEFAULT_SCALE):
        return panel.verdict("broken", notes=("The grade lies above its scale.",))
    if below.met:
        return panel.verdict("ask", notes=("Below grade one: is it meant as no murmur?",))
    found, notes = "holds", tuple[str, ...]()
    if grade != grade.to_integral_value():
        found, notes = "ask", ("Between two grades: store it as a range.",)
    return panel.verdict(found, possible=(found,) if scale else (found, "broken"), notes=notes)


@classification("check.pulsus-paradoxus")
def pulsus_paradoxus_possible(panel: Panel) -> Verdict:
    """Paradox in mmHg: above systolic is impossible; very large or far above the pulse pressure is asked."""
    paradox, systolic = panel.number("pulsus_paradoxus_mmhg"), panel.number("systolic_mmhg")
    pulse = panel.number("pulse_pressure_mmhg")
    high = panel.judge("check.paradox.high")
    excess = None if paradox is None or pulse is None else paradox - pulse
    above = panel.judge("check.paradox.above-pulse-pressure", excess)
    if paradox is not None and systolic is not None and paradox > systolic:
        return panel.verdict("broken", notes=("The fall cannot exceed systolic pressure.",))
    if high.met or above.met:
        return panel.verdict("ask", possible=("ask",) if systolic is not None else ("ask", "broken"))
    if paradox is None or systolic is None:
        return panel.verdict(UNKNOWN)
    return panel.verdict("holds", possible=("holds",) if pulse is not None else ("holds", "ask"))


@classification("check.pulse-deficit")
def pulse_deficit_possible(panel: Panel) -> Verdict:
    """Rate at the wrist above the apex by more than counting error: transposed, or not counted together."""
    apical, radial = panel.number("apical_rate_per_min"), panel.number("radial_rate_per_min")
    excess = None if apical is None or radial is None else radial - apical
    counted_together = panel.flag("full_minute_simultaneous")
    apart = panel.judge("check.deficit.apart", excess)
    together = panel.judge("check.deficit.together", excess)
    if counted_together is None and together.met and not apart.met:
        return panel.verdict("holds", possible=("holds", "ask"))
    return _ask_if_any(panel, [together if counted_together else apart])


@classification("check.systolic-above-diastolic")
def systolic_above_diastolic(panel: Panel) -> Verdict:
    """Systolic must exceed diastolic; else the entries are transposed."""
    systolic, diastolic = panel.number("systolic_mmhg"), panel.number("diastolic_mmhg")
    if systolic is None or diastolic is None:
        return panel.verdict(UNKNOWN)
    return panel.verdict("holds" if systolic > diastolic else "broken")


@classification("check.pulse-pressure")
def pulse_pressure_agrees(panel: Panel) -> Verdict:
    """A typed pulse pressure against systolic minus diastolic of the same reading."""
    difference = _pulse_difference(panel)
    return _broken_if(panel, panel.judge("check.pulse-pressure.difference", difference))


@classification("check.mean-arterial")
def mean_arterial_between(panel: Panel) -> Verdict:
    """A recorded mean must lie between diastolic and systolic, with slack for oscillometry."""
    mean, systolic = panel.number("mean_arterial_mmhg"), panel.number("systolic_mmhg")
    diastolic = panel.number("diastolic_mmhg")
    outside = None
    if mean is not None and systolic is not None and diastolic is not None:
        outside = max(diastolic - mean, mean - systolic)
    return _broken_if(panel, panel.judge("check.mean.slack", outside))


@classification("check.mean-arterial-formula")
def mean_arterial_near_formula(panel: Panel) -> Verdict:
    """A recorded mean against the one-third formula; a gap is common and no mistake."""
    mean, systolic = panel.number("mean_arterial_mmhg"), panel.number("systolic_mmhg")
    diastolic = panel.number("diastolic_mmhg")
    gap = None
    if mean is not None and systolic is not None and diastolic is not None:
        gap = abs(mean - (systolic + 2 * diastolic) / 3)
    return _ask_if_any(panel, [panel.judge("check.mean-formula.difference", gap)])


@classification("check.pressure-unit")
def pressure_unit(panel: Panel) -> Verdict:
    """A systolic pressure labelled mmHg in the window where kilopascal values lie."""
    states = (panel.judge("check.unit.low"), panel.judge("check.unit.high"))
    if states[0].state == UNKNOWN:
        return panel.verdict(UNKNOWN)
    return (
        panel.verdict("ask", notes=(_ASK_FOR_UNIT,)) if all(s.met for s in states) else panel.verdict("holds")
    )


@classification("check.plausible-range")
def plausible_range(panel: Panel) -> Verdict:
    """Vital numbers against wide adult ranges; a pressure that looks like kPa is left to the unit check."""
    names = ["diastolic", "heart-rate", "breathing", "lvef"]
    if not _looks_like_kilopascal(panel):
        names.insert(0, "systolic")
    criteria = [panel.judge(f"check.range.{name}.{end}") for name in names for end in ("low", "high")]
    known = [criterion for criterion in criteria if criterion.state != UNKNOWN]
    if not known:
        return panel.verdict(UNKNOWN)
    if any(c.met for c in known):
        return panel.verdict("ask")
    return panel.verdict("holds", possible=("holds",) if known == criteria else ("holds", "ask"))


@classification("check.rvsp-above-right-atrial")
def rvsp_above_right_atrial(panel: Panel) -> Verdict:
    """Right ventricular systolic pressure contains the right atrial one and must exceed it."""
    ventricle, atrium = panel.number("rvsp_mmhg"), panel.number("right_atrial_mmhg")
    if ventricle is None or atrium is None:
        return panel.verdict(UNKNOWN)
    return panel.verdict("holds" if ventricle > atrium else "broken")


@classification("check.peak-to-peak")
def peak_to_peak_agrees(panel: Panel) -> Verdict:
    """A recorded catheter gradient against the difference of the two peaks."""
    recorded, ventricle = panel.number("peak_to_peak_mmhg"), panel.number("lv_systolic_mmhg")
    aorta = panel.number("aortic_systolic_mmhg")
    gap = None
    if recorded is not None and ventricle is not None and aorta is not None:
        gap = abs(recorded - (ventricle - aorta))
    return _broken_if(panel, panel.judge("check.peak-to-peak.difference", gap))


@classification("check.peak-gradient")
def peak_gradient_agrees(panel: Panel) -> Verdict:
    """A Doppler peak gradient against 4 v^2; not judged where laboratories count the proximal velocity."""
    recorded, velocity = panel.number("peak_gradient_mmhg"), panel.number("jet_velocity_m_per_s")
    inexact = any_of(
        (panel.judge("check.peak-gradient.velocity").state, panel.judge("check.peak-gradient.proximal").state)
    )
    if inexact == "met":
        return panel.verdict(UNKNOWN, notes=("Not compared: the velocity before the narrowing counts here.",))
    gap = None
    if recorded is not None and velocity is not None:
        gap = abs(recorded / (4 * velocity**2) - 1) * 100
    return _ask_if_any(panel, [panel.judge("check.peak-gradient.difference", gap)])


@classification("check.mean-below-peak")
def mean_below_peak(panel: Panel) -> Verdict:
    """A mean cannot reach the peak of the same valve in the same study."""
    mean, peak = panel.number("mean_gradient_mmhg"), panel.number("peak_gradient_mmhg")
    if mean is None or peak is None:
        return panel.verdict(UNKNOWN)
    return panel.verdict("holds" if mean < peak or mean == peak == 0 else "broken")


@classification("check.mitral-area")
def mitral_area_near_half_time(panel: Panel) -> Verdict:
    """A recorded mitral area against 220 by the half-time."""
    area, half_time = panel.number("mitral_area_cm2"), panel.number("mitral_half_time_ms")
    gap = None if area is None or half_time is None else abs(area * half_time / 220 - 1) * 100
    return _ask_if_any(panel, [panel.judge("check.mitral-area.difference", gap)])


def _looks_like_kilopascal(panel: Panel) -> bool:
    answer = pressure_unit(cutoffs=panel.cutoffs, systolic_as_entered=panel.number("systolic_as_entered"))
    return isinstance(answer, Grade) and answer.grade == "ask"


def _pulse_difference(panel: Panel) -> Decimal | None:
    recorded, systolic = panel.number("pulse_pressure_mmhg"), panel.number("systolic_mmhg")
    diastolic = panel.number("diastolic_mmhg")
    if recorded is None or systolic is None or diastolic is None:
        return None
    return abs(recorded - (systolic - diastolic))


def _ask_if_any(panel: Panel, criteria: list[Criterion]) -> Verdict:
    state = any_of(criterion.state for criterion in criteria)
    return panel.verdict({"met": "ask", "unmet": "holds", "unknown": UNKNOWN}[state])


def _broken_if(panel: Panel, criterion: Criterion) -> Verdict:
    return panel.verdict({"met": "broken", "unmet": "holds", "unknown": UNKNOWN}[criterion.state])
