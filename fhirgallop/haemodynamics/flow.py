"""Flow: stroke volume by outflow Doppler, output, and both by body surface (EACVI/ASE 2017, from memory)."""

from __future__ import annotations

from decimal import Decimal

from fhirgallop.haemodynamics.arithmetic import CIRCLE
from fhirgallop.haemodynamics.computation import computation


@computation("flow.stroke-volume")
def stroke_volume(lvot_diameter_cm: Decimal, lvot_vti_cm: Decimal) -> Decimal:
    """Stroke volume in mL: outflow area (cm2) times velocity-time integral (cm)."""
    return CIRCLE * lvot_diameter_cm**2 * lvot_vti_cm


@computation("flow.stroke-volume-index")
def stroke_volume_index(stroke_volume_ml: Decimal, body_surface_m2: Decimal) -> Decimal:
    """Stroke volume by body surface in mL/m2."""
    return stroke_volume_ml / body_surface_m2


@computation("flow.cardiac-output")
def cardiac_output(stroke_volume_ml: Decimal, heart_rate_per_min: Decimal) -> Decimal:
    """Cardiac output in L/min."""
    return stroke_volume_ml * heart_rate_per_min / 1000


@computation("flow.cardiac-index")
def cardiac_index(cardiac_output_l_per_min: Decimal, body_surface_m2: Decimal) -> Decimal:
    """Cardiac output by body surface in L/min/m2."""
    return cardiac_output_l_per_min / body_surface_m2
