"""Right heart pressures by Doppler and inferior vena cava, in mmHg (ASE right heart recommendations)."""

from __future__ import annotations

from decimal import Decimal

from fhirgallop.haemodynamics.computation import Noted, Stop, computation
from fhirgallop.haemodynamics.entries import on_side
from fhirgallop.haemodynamics.tables import load

_LOW, _MIDDLE, _HIGH = Decimal(3), Decimal(8), Decimal(15)


@computation("right-heart.rvsp")
def right_ventricular_systolic(tr_velocity_m_per_s: Decimal, right_atrial_mmhg: Decimal) -> Decimal:
    """RVSP: four times the squared velocity (m/s) of tricuspid regurgitation plus right atrial pressure."""
    return 4 * tr_velocity_m_per_s**2 + right_atrial_mmhg


@computation("right-heart.pasp")
def pulmonary_systolic(
    rvsp_mmhg: Decimal, pulmonary_valve_gradient_mmhg: Decimal | None
) -> Decimal | Stop | Noted:
    """Pulmonary artery systolic pressure: RVSP less the gradient between ventricle and artery."""
    if pulmonary_valve_gradient_mmhg is None:
        note = (
            "Holds only without a narrow pulmonary valve or right outflow; their gradient was not recorded."
        )
        return Noted(rvsp_mmhg, (note,))
    if pulmonary_valve_gradient_mmhg >= rvsp_mmhg:
        text = "The gradient cannot reach the ventricular pressure."
        return Stop("pulmonary_valve_gradient_mmhg", "below RVSP", text)
    return rvsp_mmhg - pulmonary_valve_gradient_mmhg


@computation("right-heart.right-atrial-by-ivc")
def right_atrial_by_ivc(ivc_diameter_cm: Decimal, ivc_collapse_percent: Decimal) -> Decimal:
    """Right atrial pressure as 3, 8 or 15 by diameter (cm) and collapse (%) of the inferior vena cava."""
    cutoffs = load().cutoffs
    wide, collapses, stiff = (
        cutoffs.find(f"ivc.{name}", "formula") for name in ("wide", "collapses", "stiff")
    )
    is_wide = on_side(ivc_diameter_cm, wide.comparator, wide.value)
    if not is_wide and on_side(ivc_collapse_percent, collapses.comparator, collapses.value):
        return _LOW
    if is_wide and on_side(ivc_collapse_percent, stiff.comparator, stiff.value):
        return _HIGH
    return _MIDDLE


@computation("right-heart.mean-pulmonary-chemla")
def mean_pulmonary(pasp_mmhg: Decimal) -> Decimal:
    """Mean pulmonary pressure estimated from the systolic one (Chemla, Chest 2004; from memory)."""
    return Decimal("0.61") * pasp_mmhg + 2


@computation("right-heart.diastolic-gradient")
def diastolic_gradient(pa_diastolic_mmhg: Decimal, wedge_mmhg: Decimal) -> Decimal:
    """Pulmonary artery diastolic pressure less the wedge pressure (definition); may be negative."""
    return pa_diastolic_mmhg - wedge_mmhg
