"""Diastolic function: ratios, the 2016 screen and grade, the 2025 grade and its way in atrial fibrillation.

2016 (ASE/EACVI) is the default; the 2025 update was built from published summaries and is optional. Their
cut-offs for e' differ, so a grade is worth nothing without its edition. Velocities in cm/s, the tricuspid one
in m/s.
"""

from __future__ import annotations

from decimal import Decimal

from fhirgallop.haemodynamics.classification import Panel, Verdict, classification
from fhirgallop.haemodynamics.computation import computation
from fhirgallop.haemodynamics.values import UNKNOWN, State, any_of

_GRADES_OF_RAISED_PRESSURE = ("grade II", "grade III")


@computation("diastole.e-over-a")
def e_over_a(mitral_e_cm_per_s: Decimal, mitral_a_cm_per_s: Decimal) -> Decimal:
    """Ratio of early to atrial filling velocity."""
    return mitral_e_cm_per_s / mitral_a_cm_per_s


@computation("diastole.average-e-prime")
def average_e_prime(septal_e_prime_cm_per_s: Decimal, lateral_e_prime_cm_per_s: Decimal) -> Decimal:
    """Mean of the septal and the lateral velocity of the mitral ring."""
    return (septal_e_prime_cm_per_s + lateral_e_prime_cm_per_s) / 2


@computation("diastole.average-e-over-e-prime")
def average_e_over_e_prime(mitral_e_cm_per_s: Decimal, average_e_prime_cm_per_s: Decimal) -> Decimal:
    """E by the average e', both in cm/s."""
    return mitral_e_cm_per_s / average_e_prime_cm_per_s


@computation("diastole.septal-e-over-e-prime")
def septal_e_over_e_prime(mitral_e_cm_per_s: Decimal, septal_e_prime_cm_per_s: Decimal) -> Decimal:
    """E by the septal e', both in cm/s."""
    return mitral_e_cm_per_s / septal_e_prime_cm_per_s


@computation("diastole.lateral-e-over-e-prime")
def lateral_e_over_e_prime(mitral_e_cm_per_s: Decimal, lateral_e_prime_cm_per_s: Decimal) -> Decimal:
    """E by the lateral e', both in cm/s."""
    return mitral_e_cm_per_s / lateral_e_prime_cm_per_s


@classification("diastole.screen")
def screen(panel: Panel) -> Verdict:
    """2016, normal ejection fraction: over half of four positive is dysfunction, exactly half indeterminate.

    A missing variable may be either; the grade is given only when it cannot change it.
    """
    ring = any_of((panel.judge("diastole-screen.septal").state, panel.judge("diastole-screen.lateral").state))
    others = ("diastole-screen.e-over-e-prime", "diastole-screen.tricuspid", "diastole-screen.atrium")
    states = [ring, *(panel.judge(name).state for name in others)]
    positive, unknown = states.count("met"), states.count(UNKNOWN)
    possible = {_screen_grade(count) for count in range(positive, positive + unknown + 1)}
    if len(possible) == 1:
        return panel.verdict(possible.pop())
    note = "The recommendation counts the variables at hand; here a missing one is unknown, not normal."
    return panel.verdict(UNKNOWN, possible=possible, notes=(note,))


@classification("diastole.grade")
def grade(panel: Panel) -> Verdict:
    """Grade I to III by the chosen edition: E/A and E, then the marks of raised left atrial pressure."""
    return _grade_2025(panel) if panel.scheme.edition == "ase-2025" else _grade_2016(panel)


@classification("diastole.atrial-fibrillation")
def atrial_fibrillation(panel: Panel) -> Verdict:
    """2025: of four marks three or more say raised, none or one not raised, two undetermined."""
    pressure = any_of(
        (panel.judge("diastole-af.tricuspid").state, panel.judge("diastole-af.pulmonary-pressure").state)
    )
    names = ("diastole-af.e", "diastole-af.septal", "diastole-af.deceleration")
    states = [pressure, *(panel.judge(name).state for name in names)]
    positive, unknown = states.count("met"), states.count(UNKNOWN)
    steps = ("not raised", "not raised", "undetermined", "raised", "raised")
    possible = set(steps[positive : positive + unknown + 1])
    return panel.verdict(possible.pop()) if len(possible) == 1 else panel.verdict(UNKNOWN, possible=possible)


def _screen_grade(positive: int) -> str:
    return "normal" if positive < 2 else "indeterminate" if positive == 2 else "dysfunction"


def _grade_2016(panel: Panel) -> Verdict:
    low, high = panel.judge("diastole.ratio.low"), panel.judge("diastole.ratio.high")
    slow = panel.judge("diastole.e.low")
    names = ("diastole.e-over-e-prime", "diastole.tricuspid", "diastole.atrium")
    by_marks = _marks_2016([panel.judge(name).state for name in names])
    if low.state == UNKNOWN:
        return panel.verdict(UNKNOWN, notes=("E/A is needed first.",))
    if high.met:
        return panel.verdict("grade III")
    if low.met and slow.met:
        return panel.verdict("grade I")
    if low.met and slow.state == UNKNOWN and by_marks != {"grade I"}:
        return panel.verdict(
            UNKNOWN, possible={"grade I"} | by_marks, notes=("E is needed beside a low E/A.",)
        )
    if len(by_marks) == 1:
        return panel.verdict(by_marks.pop())
    return panel.verdict(UNKNOWN, possible=by_marks)


def _marks_2016(states: list[State]) -> set[str]:
    """Two of three decide; one for and one against, with the third missing, is indeterminate."""
    positive, negative = states.count("met"), states.count("unmet")
    if positive >= 2:
        return {"grade II"}
    if negative >= 2:
        return {"grade I"}
    if positive == negative == 1:
        return {"indeterminate"}
    return {"grade I", "indeterminate", "grade II"}


def _grade_2025(panel: Panel) -> Verdict:
    low, high = panel.judge("diastole.ratio.low"), panel.judge("diastole.ratio.high")
    relaxation = _any(panel, ("diastole.septal", "diastole.lateral", "diastole.average"))
    filling = _any(
        panel,
        ("diastole.e-over-e-prime", "diastole.e-over-e-prime.septal", "diastole.e-over-e-prime.lateral"),
    )
    pressure = _any(panel, ("diastole.tricuspid", "diastole.pulmonary-pressure"))
    ties = (
        "diastole.reservoir-strain",
        "diastole.pulmonary-vein",
        "diastole.atrium",
        "diastole.relaxation-time",
    )
    tie = any_of(state for state in (panel.judge(name).state for name in ties) if state != UNKNOWN)
    marks = (relaxation, filling, pressure)
    if marks.count("met") >= 2:
        return _by_ratio(panel, high.state)
    if UNKNOWN in marks:
        return panel.verdict(UNKNOWN, notes=("e', E/e' and tricuspid velocity are needed.",))
    if "met" not in marks:
        return panel.verdict("normal")
    if relaxation == "met" and low.met:
        return panel.verdict("grade I")
    if tie == UNKNOWN:
        note = "One mark only: strain, pulmonary vein, atrial volume or relaxation time would settle it."
        return panel.verdict("indeterminate", notes=(note,))
    if tie == "met":
        return _by_ratio(panel, high.state)
    return panel.verdict("grade I" if relaxation == "met" else "normal")


def _by_ratio(panel: Panel, high: State) -> Verdict:
    if high == UNKNOWN:
        return panel.verdict(UNKNOWN, possible=_GRADES_OF_RAISED_PRESSURE, notes=("E/A tells II from III.",))
    return panel.verdict("grade III" if high == "met" else "grade II")


def _any(panel: Panel, names: tuple[str, ...]) -> State:
    """Any of several forms of one mark; forms that were not measured do not make the mark unknown."""
    return any_of(state for state in (panel.judge(name).state for name in names) if state != UNKNOWN)
