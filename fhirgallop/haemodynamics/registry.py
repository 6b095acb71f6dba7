"""Every computation and classification by id, and which of them the numbers at hand allow.

The lists are made once from the family modules; they cannot be changed.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping
from types import MappingProxyType

from fhirgallop.errors import AssetError
from fhirgallop.haemodynamics import (
    arteries,
    body,
    checks,
    conversions,
    diastology,
    electrocardiogram,
    flow,
    heart_failure,
    pressures,
    probability,
    regurgitation,
    right_heart,
    stenosis,
    stenosis_severity,
    ventricle,
)
from fhirgallop.haemodynamics.classification import Classification
from fhirgallop.haemodynamics.computation import Computation
from fhirgallop.haemodynamics.tables import load

_FAMILIES = (
    pressures,
    body,
    flow,
    stenosis,
    stenosis_severity,
    regurgitation,
    right_heart,
    diastology,
    ventricle,
    heart_failure,
    electrocardiogram,
    arteries,
    conversions,
    probability,
    checks,
)


def _computations() -> Mapping[str, Computation]:
    found = {v.id: v for module in _FAMILIES for v in vars(module).values() if isinstance(v, Computation)}
    if missing := set(load().formulas) - set(found):
        raise AssetError(f"computations.csv: no formula for {sorted(missing)}")
    return MappingProxyType({name: found[name] for name in load().formulas})


def _classifications() -> Mapping[str, Classification]:
    found = {v.id: v for module in _FAMILIES for v in vars(module).values() if isinstance(v, Classification)}
    if missing := set(load().schemes) - set(found):
        raise AssetError(f"classifications.csv: no rule for {sorted(missing)}")
    return MappingProxyType({name: found[name] for name in load().schemes})


COMPUTATIONS: Mapping[str, Computation] = _computations()
"""Every formula by id, in the order of its table."""

CLASSIFICATIONS: Mapping[str, Classification] = _classifications()
"""Every classification and check by id, in the order of its table."""


def derivable(known: Collection[str]) -> tuple[Computation, ...]:
    """The computations whose needed inputs are all among `known` input names, in the order of the table."""
    names = set(known)
    return tuple(c for c in COMPUTATIONS.values() if names.issuperset(c.spec.needs))


def gradable(known: Collection[str]) -> tuple[Classification, ...]:
    """The classifications, in any edition, that can use at least one of `known` input names."""
    names = set(known)
    return tuple(
        c for c in CLASSIFICATIONS.values() if any(names & set(s.may_use) for s in c.schemes.values())
    )
