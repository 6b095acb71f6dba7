"""Left ventricle: ejection fraction in its two vocabularies, mass, wall thickness and geometry.

Diameters in cm at end-diastole, mass in g. Heart failure classes and echo ranges are two vocabularies: a
woman's 53 % is mildly below the echo range and yet "preserved".
"""

from __future__ import annotations

from decimal import Decimal

from fhirgallop.haemodynamics.classification import Panel, Verdict, classification
from fhirgallop.haemodynamics.computation import computation
from fhirgallop.haemodynamics.values import UNKNOWN

_BY_SEX = "The limits depend on sex."


@computation("ventricle.mass")
def mass(
    lv_internal_diameter_cm: Decimal, septal_thickness_cm: Decimal, posterior_wall_cm: Decimal
) -> Decimal:
    """Left ventricular mass in g from one diameter and two walls (cube formula)."""
    outer = lv_internal_diameter_cm + septal_thickness_cm + posterior_wall_cm
    return Decimal("0.8") * Decimal("1.04") * (outer**3 - lv_internal_diameter_cm**3) + Decimal("0.6")


@computation("ventricle.mass-index")
def mass_index(lv_mass_g: Decimal, body_surface_m2: Decimal) -> Decimal:
    """Left ventricular mass by body surface in g/m2."""
    return lv_mass_g / body_surface_m2


@computation("ventricle.relative-wall-thickness")
def relative_wall_thickness(posterior_wall_cm: Decimal, lv_internal_diameter_cm: Decimal) -> Decimal:
    """Twice the posterior wall by the inner diameter."""
    return 2 * posterior_wall_cm / lv_internal_diameter_cm


@classification("ventricle.heart-failure-class")
def heart_failure_class(panel: Panel) -> Verdict:
    """HFrEF up to 40, HFpEF from 50, HFmrEF between (universal definition 2021)."""
    reduced, preserved = panel.judge("lvef-hf.reduced"), panel.judge("lvef-hf.preserved")
    if reduced.state == UNKNOWN:
        return panel.verdict(UNKNOWN)
    return panel.verdict("HFrEF" if reduced.met else "HFpEF" if preserved.met else "HFmrEF")


@classification("ventricle.ejection-fraction")
def ejection_fraction_range(panel: Panel) -> Verdict:
    """Ejection fraction in the echo ranges, whose upper limits differ by sex."""
    severe, moderate = panel.judge("lvef.severe"), panel.judge("lvef.moderate")
    sexes = (panel.choice("sex"),) if panel.choice("sex") else ("male", "female")
    limits = {sex: (panel.judge(f"lvef.above.{sex}"), panel.judge(f"lvef.normal.{sex}")) for sex in sexes}
    if severe.state == UNKNOWN:
        return panel.verdict(UNKNOWN)
    if severe.met or moderate.met:
        return panel.verdict("severely below" if severe.met else "moderately below")
    found = {
        "above the normal range" if above.met else "normal range" if normal.met else "mildly below"
        for above, normal in limits.values()
    }
    return (
        panel.verdict(found.pop())
        if len(found) == 1
        else panel.verdict(UNKNOWN, possible=found, notes=(_BY_SEX,))
    )


@classification("ventricle.geometry")
def geometry(panel: Panel) -> Verdict:
    """Mass index and relative wall thickness give four shapes; what is missing leaves two or four open."""
    sexes = (panel.choice("sex"),) if panel.choice("sex") else ("male", "female")
    heavy = {panel.judge(f"geometry.mass.{sex}").state for sex in sexes}
    thick = {panel.judge("geometry.wall").state}
    shapes = {
        ("unmet", "unmet"): "normal geometry",
        ("unmet", "met"): "concentric remodelling",
        ("met", "unmet"): "eccentric hypertrophy",
        ("met", "met"): "concentric hypertrophy",
    }
    either = {"met", "unmet"}
    possible = {
        shapes[m, t]
        for m in (either if UNKNOWN in heavy else heavy)
        for t in (either if UNKNOWN in thick else thick)
    }
    if len(possible) == 1:
        return panel.verdict(possible.pop())
    return panel.verdict(UNKNOWN, possible=possible, notes=() if panel.choice("sex") else (_BY_SEX,))
