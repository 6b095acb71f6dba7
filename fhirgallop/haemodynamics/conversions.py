"""Conversions of the section "units": each for a value whose unit was declared, never guessed.

Sources: SI brochure for the millimetre of mercury, density of mercury for the water column, molar mass of
NT-proBNP.
"""

from __future__ import annotations

from decimal import Decimal

from fhirgallop.haemodynamics.computation import computation

_MMHG_PER_KPA = Decimal("7.50062")
_CMH2O_PER_MMHG = Decimal("1.35951")
_PG_PER_ML_PER_PMOL_PER_L = Decimal("8.457")


@computation("convert.kilopascal")
def mmhg_from_kilopascal(pressure_kpa: Decimal) -> Decimal:
    """Pressure in mmHg from kPa (factor 7.50062)."""
    return pressure_kpa * _MMHG_PER_KPA


@computation("convert.water-column")
def mmhg_from_water_column(pressure_cmh2o: Decimal) -> Decimal:
    """Pressure in mmHg from cm of water (divisor 1.35951)."""
    return pressure_cmh2o / _CMH2O_PER_MMHG


@computation("convert.velocity")
def cm_per_s_from_m_per_s(velocity_m_per_s: Decimal) -> Decimal:
    """Velocity in cm/s from m/s: the trap of E/e', where one comes in m/s and the other in cm/s."""
    return velocity_m_per_s * 100


@computation("convert.nt-probnp")
def pmol_per_l_from_pg_per_ml(nt_probnp_pg_per_ml: Decimal) -> Decimal:
    """NT-proBNP in pmol/L from pg/mL (divisor 8.457)."""
    return nt_probnp_pg_per_ml / _PG_PER_ML_PER_PMOL_PER_L
