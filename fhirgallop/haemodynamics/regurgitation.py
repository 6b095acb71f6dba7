"""Leaking valves: orifice, volume and fraction, and severity by all measures together.

Lengths in cm, velocities in cm/s, areas in cm2, volumes in mL a beat. Sources: ASE native valvular
regurgitation 2017, 2020 ACC/AHA, 2021 ESC/EACTS, five-grade tricuspid scheme 2017; the tables say which
limits were read and which are from memory.
"""

from __future__ import annotations

from dataclasses import replace
from decimal import Decimal

from fhirgallop.haemodynamics.arithmetic import PI
from fhirgallop.haemodynamics.classification import Panel, Verdict, classification, graded_by_measures
from fhirgallop.haemodynamics.computation import Stop, computation
from fhirgallop.haemodynamics.values import UNKNOWN

_ELLIPTICAL = "mr.orifice.severe-elliptical"
_LOW_FLOW = "mr.volume.severe-low-flow"


@computation("regurgitation.orifice")
def orifice_by_convergence(
    pisa_radius_cm: Decimal, aliasing_velocity_cm_per_s: Decimal, regurgitant_velocity_cm_per_s: Decimal
) -> Decimal | Stop:
    """Effective regurgitant orifice in cm2: flow through a half sphere by the peak velocity of the jet."""
    if aliasing_velocity_cm_per_s >= regurgitant_velocity_cm_per_s:
        text = "The jet must be faster than the aliasing velocity: both in cm/s?"
        return Stop("aliasing_velocity_cm_per_s", "below the jet's velocity", text)
    return 2 * PI * pisa_radius_cm**2 * aliasing_velocity_cm_per_s / regurgitant_velocity_cm_per_s


@computation("regurgitation.volume")
def regurgitant_volume(regurgitant_orifice_cm2: Decimal, regurgitant_vti_cm: Decimal) -> Decimal:
    """Regurgitant volume of a beat in mL: orifice times velocity-time integral of the jet."""
    return regurgitant_orifice_cm2 * regurgitant_vti_cm


@computation("regurgitation.fraction")
def regurgitant_fraction(regurgitant_volume_ml: Decimal, stroke_volume_ml: Decimal) -> Decimal:
    """Share of the beat that leaks back, in percent; stroke_volume_ml is the forward volume."""
    return regurgitant_volume_ml / (regurgitant_volume_ml + stroke_volume_ml) * 100


@classification("mitral-regurgitation.severity")
def mitral_severity(panel: Panel) -> Verdict:
    """Severity of mitral regurgitation.

    ESC/EACTS has lower limits in secondary disease with an elliptical orifice or low flow; where mechanism or
    condition is not recorded, such a limit stays unknown.
    """
    special = {_ELLIPTICAL: "elliptical_orifice", _LOW_FLOW: "low_flow"}
    known = {row.id for row in panel.cutoffs.of(panel.scheme.id, panel.scheme.edition)}
    mechanism = panel.choice("mitral_mechanism")
    extra = []
    for name, condition in special.items():
        if name not in known or mechanism == "primary" or panel.flag(condition) is False:
            continue
        criterion = panel.judge(name)
        applies = mechanism == "secondary" and panel.flag(condition) is True
        extra.append(criterion if applies or not criterion.met else replace(criterion, state=UNKNOWN))
    return graded_by_measures(panel, extra, frozenset(special))


@classification("aortic-regurgitation.severity")
def aortic_severity(panel: Panel) -> Verdict:
    """Severity of aortic regurgitation from jet, vena contracta, half-time, orifice, volume and fraction."""
    return graded_by_measures(panel)


@classification("tricuspid-regurgitation.severity")
def tricuspid_severity(panel: Panel) -> Verdict:
    """Severity of tricuspid regurgitation in five grades from vena contracta, orifice and volume."""
    return graded_by_measures(panel)
