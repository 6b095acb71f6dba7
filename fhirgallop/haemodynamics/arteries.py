"""Arteries of the leg: the ankle-brachial index and its class. Pressures in mmHg."""

from __future__ import annotations

from decimal import Decimal

from fhirgallop.haemodynamics.classification import Panel, Verdict, classification
from fhirgallop.haemodynamics.computation import computation
from fhirgallop.haemodynamics.values import UNKNOWN


@computation("artery.ankle-brachial")
def ankle_brachial(ankle_systolic_mmhg: Decimal, arm_systolic_mmhg: Decimal) -> Decimal:
    """Higher ankle pressure of a leg by the higher arm pressure."""
    return ankle_systolic_mmhg / arm_systolic_mmhg


@classification("artery.ankle-brachial-class")
def ankle_brachial_class(panel: Panel) -> Verdict:
    """Low up to 0.90, borderline below 1.00, usual to 1.40, above it the artery cannot be compressed."""
    low, below = panel.judge("abi.low"), panel.judge("abi.below-usual")
    stiff = panel.judge("abi.non-compressible")
    if low.state == UNKNOWN:
        return panel.verdict(UNKNOWN)
    if stiff.met:
        return panel.verdict("non-compressible")
    return panel.verdict("low" if low.met else "borderline" if below.met else "usual range")
