"""QT interval corrected for rate by four formulas, and its class. Intervals in ms, rate per minute.

Sources: Bazett 1920, Fridericia 1920, Sagie 1992 (Framingham), Hodges 1983, all from memory.
"""

from __future__ import annotations

from decimal import Decimal

from fhirgallop.haemodynamics.arithmetic import cube_root
from fhirgallop.haemodynamics.classification import Panel, Verdict, classification
from fhirgallop.haemodynamics.computation import Stop, computation
from fhirgallop.haemodynamics.values import UNKNOWN

_TOO_LONG = Stop(
    "qt_ms", "shorter than the RR interval", "QT must be shorter than the RR interval: rate or unit?"
)


def _rr_seconds(heart_rate_per_min: Decimal) -> Decimal:
    return 60 / heart_rate_per_min


def _exceeds_cycle(qt_ms: Decimal, heart_rate_per_min: Decimal) -> bool:
    return qt_ms >= 1000 * _rr_seconds(heart_rate_per_min)


@computation("ecg.rr-interval")
def rr_interval(heart_rate_per_min: Decimal) -> Decimal:
    """RR interval in ms."""
    return 1000 * _rr_seconds(heart_rate_per_min)


@computation("ecg.qtc-bazett")
def qtc_bazett(qt_ms: Decimal, heart_rate_per_min: Decimal) -> Decimal | Stop:
    """QT divided by the square root of RR in s; errs outside 60 to 90 a minute."""
    if _exceeds_cycle(qt_ms, heart_rate_per_min):
        return _TOO_LONG
    return qt_ms / _rr_seconds(heart_rate_per_min).sqrt()


@computation("ecg.qtc-fridericia")
def qtc_fridericia(qt_ms: Decimal, heart_rate_per_min: Decimal) -> Decimal | Stop:
    """QT divided by the cube root of RR in s."""
    if _exceeds_cycle(qt_ms, heart_rate_per_min):
        return _TOO_LONG
    return qt_ms / cube_root(_rr_seconds(heart_rate_per_min))


@computation("ecg.qtc-framingham")
def qtc_framingham(qt_ms: Decimal, heart_rate_per_min: Decimal) -> Decimal | Stop:
    """QT plus 154 ms for every second that RR falls short of one."""
    if _exceeds_cycle(qt_ms, heart_rate_per_min):
        return _TOO_LONG
    return qt_ms + 154 * (1 - _rr_seconds(heart_rate_per_min))


@computation("ecg.qtc-hodges")
def qtc_hodges(qt_ms: Decimal, heart_rate_per_min: Decimal) -> Decimal | Stop:
    """QT plus 1.75 ms for every beat above 60 a minute."""
    if _exceeds_cycle(qt_ms, heart_rate_per_min):
        return _TOO_LONG
    return qt_ms + Decimal("1.75") * (heart_rate_per_min - 60)


@classification("ecg.qtc-class")
def qtc_class(panel: Panel) -> Verdict:
    """Corrected QT against adult limits; between the limits of the sexes an unknown sex leaves it unknown."""
    short = panel.judge("qtc.short")
    limits = {sex: panel.judge(f"qtc.prolonged.{sex}") for sex in ("male", "female")}
    if short.state == UNKNOWN:
        return panel.verdict(UNKNOWN)
    if short.met:
        return panel.verdict("short")
    sex = panel.choice("sex")
    relevant = [limits[sex]] if sex else list(limits.values())
    if all(limit.met for limit in relevant):
        return panel.verdict("prolonged")
    if not any(limit.met for limit in relevant):
        return panel.verdict("within limits")
    return panel.verdict(
        UNKNOWN, possible=("within limits", "prolonged"), notes=("The limit depends on sex.",)
    )
