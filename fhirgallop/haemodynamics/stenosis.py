"""Narrow valves: gradients and areas. Velocities in m/s, lengths in cm, areas in cm2, gradients in mmHg.

The severity of stenosis is graded in `stenosis_severity`.
"""

from __future__ import annotations

from decimal import Decimal

from fhirgallop.haemodynamics.arithmetic import CIRCLE
from fhirgallop.haemodynamics.computation import Stop, computation

_AORTIC_CONSTANT = Decimal("44.3")
_MITRAL_CONSTANT = Decimal("37.7")
_SECONDS_PER_MINUTE = 60

_SLOWER = Stop(
    "proximal_velocity_m_per_s",
    "below the velocity across the narrowing",
    "Blood is faster in the narrowing than before it: transposed entries?",
)
_NO_GRADIENT = "A gradient above zero is needed: without one there is no narrowing to measure."


@computation("gradient.bernoulli-simplified")
def bernoulli_simplified(
    jet_velocity_m_per_s: Decimal, proximal_velocity_m_per_s: Decimal | None
) -> Decimal | Stop:
    """Peak gradient as four times the squared velocity; the velocity before the narrowing is left out."""
    if proximal_velocity_m_per_s is not None and proximal_velocity_m_per_s >= jet_velocity_m_per_s:
        return _SLOWER
    return 4 * jet_velocity_m_per_s**2


@computation("gradient.bernoulli-modified")
def bernoulli_modified(jet_velocity_m_per_s: Decimal, proximal_velocity_m_per_s: Decimal) -> Decimal | Stop:
    """Peak gradient as four times the difference of the squared velocities."""
    if proximal_velocity_m_per_s >= jet_velocity_m_per_s:
        return _SLOWER
    return 4 * (jet_velocity_m_per_s**2 - proximal_velocity_m_per_s**2)


@computation("gradient.peak-to-peak")
def peak_to_peak(lv_systolic_mmhg: Decimal, aortic_systolic_mmhg: Decimal) -> Decimal | Stop:
    """Catheter gradient between the two peaks, which need not be at the same instant."""
    if aortic_systolic_mmhg > lv_systolic_mmhg:
        text = "The aortic peak cannot exceed the ventricular peak by measurement: transposed entries?"
        return Stop("aortic_systolic_mmhg", "at most the ventricular peak", text)
    return lv_systolic_mmhg - aortic_systolic_mmhg


@computation("ratio.dimensionless")
def dimensionless_index(lvot_vti_cm: Decimal, aortic_vti_cm: Decimal) -> Decimal | Stop:
    """Ratio of the outflow integral to the valve integral."""
    if lvot_vti_cm > aortic_vti_cm:
        return _swapped_integrals()
    return lvot_vti_cm / aortic_vti_cm


@computation("area.aortic-continuity")
def aortic_area_continuity(
    lvot_diameter_cm: Decimal, lvot_vti_cm: Decimal, aortic_vti_cm: Decimal
) -> Decimal | Stop:
    """Aortic valve area: the same volume passes the outflow tract and the valve."""
    if lvot_vti_cm > aortic_vti_cm:
        return _swapped_integrals()
    return CIRCLE * lvot_diameter_cm**2 * lvot_vti_cm / aortic_vti_cm


@computation("area.aortic-indexed")
def aortic_area_indexed(aortic_area_cm2: Decimal, body_surface_m2: Decimal) -> Decimal:
    """Aortic valve area by body surface in cm2/m2."""
    return aortic_area_cm2 / body_surface_m2


@computation("area.aortic-hakki")
def aortic_area_hakki(
    cardiac_output_l_per_min: Decimal, aortic_mean_gradient_mmhg: Decimal
) -> Decimal | Stop:
    """Aortic valve area from output (L/min) and gradient alone (Hakki 1981)."""
    if aortic_mean_gradient_mmhg == 0:
        return Stop("aortic_mean_gradient_mmhg", "above 0", _NO_GRADIENT)
    return cardiac_output_l_per_min / aortic_mean_gradient_mmhg.sqrt()


@computation("area.mitral-hakki")
def mitral_area_hakki(cardiac_output_l_per_min: Decimal, mitral_mean_gradient_mmhg: Decimal) -> Decimal:
    """Mitral valve area from output (L/min) and gradient alone (Hakki 1981)."""
    return cardiac_output_l_per_min / mitral_mean_gradient_mmhg.sqrt()


@computation("area.aortic-gorlin")
def aortic_area_gorlin(
    cardiac_output_l_per_min: Decimal,
    heart_rate_per_min: Decimal,
    systolic_ejection_period_s: Decimal,
    aortic_mean_gradient_mmhg: Decimal,
) -> Decimal | Stop:
    """Aortic valve area from output, rate, ejection time (s a beat), gradient (Gorlin 1951, 44.3)."""
    if aortic_mean_gradient_mmhg == 0:
        return Stop("aortic_mean_gradient_mmhg", "above 0", _NO_GRADIENT)
    if heart_rate_per_min * systolic_ejection_period_s >= _SECONDS_PER_MINUTE:
        return _longer_than_a_beat("systolic_ejection_period_s")
    flow = 1000 * cardiac_output_l_per_min / (heart_rate_per_min * systolic_ejection_period_s)
    return flow / (_AORTIC_CONSTANT * aortic_mean_gradient_mmhg.sqrt())


@computation("area.mitral-gorlin")
def mitral_area_gorlin(
    cardiac_output_l_per_min: Decimal,
    heart_rate_per_min: Decimal,
    diastolic_filling_period_s: Decimal,
    mitral_mean_gradient_mmhg: Decimal,
) -> Decimal | Stop:
    """Mitral valve area from output, rate, filling time (s a beat), gradient (Gorlin 1951, 37.7)."""
    if heart_rate_per_min * diastolic_filling_period_s >= _SECONDS_PER_MINUTE:
        return _longer_than_a_beat("diastolic_filling_period_s")
    flow = 1000 * cardiac_output_l_per_min / (heart_rate_per_min * diastolic_filling_period_s)
    return flow / (_MITRAL_CONSTANT * mitral_mean_gradient_mmhg.sqrt())


@computation("area.mitral-half-time")
def mitral_area_half_time(mitral_half_time_ms: Decimal) -> Decimal:
    """Mitral valve area as 220 by the pressure half-time in ms."""
    return 220 / mitral_half_time_ms


@computation("area.mitral-deceleration")
def mitral_area_deceleration(mitral_deceleration_ms: Decimal) -> Decimal:
    """Mitral valve area as 759 by the deceleration time in ms (half-time is 0.29 of it)."""
    return 759 / mitral_deceleration_ms


def _swapped_integrals() -> Stop:
    text = "The integral across the valve must be the larger one: transposed entries or units?"
    return Stop("aortic_vti_cm", "at least the outflow integral", text)


def _longer_than_a_beat(name: str) -> Stop:
    text = (
        "The time of one beat, times the rate, must stay below a minute: is it the time a beat, in seconds?"
    )
    return Stop(name, "shorter than one cycle", text)
