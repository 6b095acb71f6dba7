"""Body size: surface area by two formulas, and mass index. Height in cm, weight in kg, adults."""

from __future__ import annotations

from decimal import Decimal

from fhirgallop.haemodynamics.computation import computation


@computation("body.surface-mosteller")
def surface_mosteller(height_cm: Decimal, weight_kg: Decimal) -> Decimal:
    """Body surface area in m2 (Mosteller, N Engl J Med 1987; from memory)."""
    return (height_cm * weight_kg / 3600).sqrt()


@computation("body.surface-dubois")
def surface_dubois(height_cm: Decimal, weight_kg: Decimal) -> Decimal:
    """Body surface area in m2 (Du Bois and Du Bois, Arch Intern Med 1916; from memory)."""
    return Decimal("0.007184") * weight_kg ** Decimal("0.425") * height_cm ** Decimal("0.725")


@computation("body.mass-index")
def mass_index(height_cm: Decimal, weight_kg: Decimal) -> Decimal:
    """Body mass index in kg/m2 (definition)."""
    return weight_kg / (height_cm / 100) ** 2
