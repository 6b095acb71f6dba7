"""Bedside pressures and pulse: mean, pulse pressure, paradox, neck veins, pulse deficit, category.

All pressures in mmHg. Limits, conditions and sources stand in the tables of `data/`.
"""

from __future__ import annotations

from decimal import Decimal

from fhirgallop.haemodynamics.classification import Panel, Verdict, classification, graded_by_measures
from fhirgallop.haemodynamics.computation import Noted, Stop, computation
from fhirgallop.haemodynamics.values import UNKNOWN

_WATER_TO_MERCURY = Decimal("1.35951")
_STERNAL_ANGLE_CM = 5
_COUNTING_ERROR = 10

_TRANSPOSED = Stop(
    "diastolic_mmhg", "below systolic", "Diastolic must lie below systolic: transposed entries?"
)


@computation("pressure.mean-arterial")
def mean_arterial(systolic_mmhg: Decimal, diastolic_mmhg: Decimal) -> Decimal | Stop:
    """Mean arterial pressure estimated as diastolic plus a third of the pulse pressure (textbook)."""
    if diastolic_mmhg >= systolic_mmhg:
        return _TRANSPOSED
    return (systolic_mmhg + 2 * diastolic_mmhg) / 3


@computation("pressure.pulse")
def pulse_pressure(systolic_mmhg: Decimal, diastolic_mmhg: Decimal) -> Decimal | Stop:
    """Pulse pressure: systolic minus diastolic (definition)."""
    if diastolic_mmhg >= systolic_mmhg:
        return _TRANSPOSED
    return systolic_mmhg - diastolic_mmhg


@computation("pressure.proportional-pulse")
def proportional_pulse_pressure(systolic_mmhg: Decimal, diastolic_mmhg: Decimal) -> Decimal | Stop:
    """Pulse pressure as a percentage of systolic (Stevenson and Perloff, JAMA 1989; from memory)."""
    if diastolic_mmhg >= systolic_mmhg:
        return _TRANSPOSED
    return (systolic_mmhg - diastolic_mmhg) / systolic_mmhg * 100


@computation("pressure.paradox")
def pulsus_paradoxus(expiratory_systolic_mmhg: Decimal, continuous_systolic_mmhg: Decimal) -> Decimal | Stop:
    """Pulsus paradoxus: first sounds in expiration only, minus sounds in every beat (bedside definition)."""
    if continuous_systolic_mmhg > expiratory_systolic_mmhg:
        text = "Sounds of every beat cannot begin above those of expiration: transposed entries?"
        return Stop("continuous_systolic_mmhg", "at most the expiratory pressure", text)
    return expiratory_systolic_mmhg - continuous_systolic_mmhg


@computation("pressure.venous-from-jugular")
def venous_from_jugular(jugular_height_cm: Decimal) -> Decimal:
    """Venous pressure in mmHg from the height (cm) above the sternal angle, right atrium 5 cm below it."""
    return (jugular_height_cm + _STERNAL_ANGLE_CM) / _WATER_TO_MERCURY


@computation("pressure.end-diastolic-step")
def end_diastolic_step(lv_end_diastolic_mmhg: Decimal, wedge_mmhg: Decimal) -> Decimal:
    """Left ventricular end-diastolic pressure less the mean wedge pressure (definition); may be negative."""
    return lv_end_diastolic_mmhg - wedge_mmhg


@computation("pulse.deficit")
def pulse_deficit(apical_rate_per_min: Decimal, radial_rate_per_min: Decimal) -> Decimal | Stop | Noted:
    """Beats a minute that do not reach the wrist; slightly negative counts are counting error."""
    deficit = apical_rate_per_min - radial_rate_per_min
    if deficit < -_COUNTING_ERROR:
        text = "The wrist cannot count more than the heart beats: transposed, or not counted together?"
        return Stop("radial_rate_per_min", "at most the apical rate plus counting error", text)
    if deficit < 0:
        return Noted(deficit, ("Negative within counting error: recount both over a full minute.",))
    return deficit


@classification("pressure.category")
def pressure_category(panel: Panel) -> Verdict:
    """Category of one office reading; the higher of the systolic and the diastolic category counts."""
    return graded_by_measures(panel)


@classification("pressure.pulse-class")
def pulse_pressure_class(panel: Panel) -> Verdict:
    """Narrow by its share of systolic, wide by its own size; transposed entries give no class."""
    systolic, diastolic = panel.number("systolic_mmhg"), panel.number("diastolic_mmhg")
    pulse = share = None
    if systolic is not None and diastolic is not None and systolic > diastolic:
        pulse = systolic - diastolic
        share = pulse / systolic * 100
    narrow, wide = panel.judge("pulse-pressure.narrow", share), panel.judge("pulse-pressure.wide", pulse)
    if pulse is None:
        return panel.verdict(UNKNOWN)
    return panel.verdict("narrow" if narrow.met else "wide" if wide.met else "usual")


@classification("pressure.end-diastolic")
def end_diastolic(panel: Panel) -> Verdict:
    """Left ventricular end-diastolic pressure against the limit of the chosen source (12, 15 or 16 mmHg)."""
    raised = panel.judge("lvedp.raised")
    if raised.state == UNKNOWN:
        return panel.verdict(UNKNOWN)
    return panel.verdict("raised" if raised.met else "not raised")
