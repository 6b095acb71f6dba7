"""Published formulas and classifications of bedside and echo numbers: pure, without FHIR.

    COMPUTATIONS["pressure.mean-arterial"](systolic_mmhg=120, diastolic_mmhg=80)   -> Result 93.33... mm[Hg]
    CLASSIFICATIONS["diastole.grade"](edition="ase-2025", e_over_a=..., ...)         -> Grade or Refusal

Every call takes named numbers in the unit of their name (`systolic_mmhg`), None for what is unknown, and
gives a frozen `Result`, `Grade` or `Refusal` that names inputs, source and caveats. Formulas live one module
a family, numbers and sources in the tables of `data/`, which `tables.py` alone reads.
"""

from __future__ import annotations

from fhirgallop.haemodynamics.registry import CLASSIFICATIONS, COMPUTATIONS, derivable, gradable
from fhirgallop.haemodynamics.tables import Cutoffs, load
from fhirgallop.haemodynamics.values import NOTICE, Criterion, Grade, Refusal, Result

__all__ = [
    "CLASSIFICATIONS",
    "COMPUTATIONS",
    "NOTICE",
    "Criterion",
    "Cutoffs",
    "Grade",
    "Refusal",
    "Result",
    "derivable",
    "gradable",
    "load",
]
