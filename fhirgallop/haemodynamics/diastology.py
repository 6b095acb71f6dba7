"""Diastolic function: ratios, the 2016 screen and grade, the 2025 grade and its way in atrial fibrillation.

2016 (ASE/EACVI) is the default; the 2025 update was built from published summaries and is optional. Their
cut-offs for e' differ, so a grade is worth nothing without its edition. Velocities in cm/s, the tricuspid one
in m/s.
"""

from __future__ import annotations

from decimal import Decimal
from itertools import product

from fhirgallop.haemodynamics.classification import Panel, Verdict, classification
from fhirgallop.haemodynamics.computation import computation
from fhirgallop.haemodynamics.values import UNKNOWN, State, any_of


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
    names = ("diastole-af.e", "diastole-af.septal", "diastole-af.deceleration")
    states = [panel.judge(name).state for name in names]
    forms = [panel.judge(f"diastole-af.{name}").state for name in ("tricuspid", "pulmonary-pressure")]
    grades = _by_count([*states, any_of(_measured(forms))])
    possible = _by_count([*states, any_of(forms)]) | grades
    return panel.verdict(grades.pop() if len(grades) == 1 else UNKNOWN, possible=possible)


def _by_count(states: list[State]) -> set[str]:
    positive, unknown = states.count("met"), states.count(UNKNOWN)
    steps = ("not raised", "not raised", "undetermined", "raised", "raised")
    return set(steps[positive : positive + unknown + 1])


def _screen_grade(positive: int) -> str:
    return "normal" if positive < 2 else "indeterminate" if positive == 2 else "dysfunction"


def _grade_2016(panel: Panel) -> Verdict:
    low, high = panel.judge("diastole.ratio.low"), panel.judge("diastole.ratio.high")
    slow = panel.judge("diastole.e.low")
    names = ("diastole.e-over-e-prime", "diastole.tricuspid", "diastole.atrium")
    by_marks, open_marks = _marks_2016([panel.judge(name).state for name in names])
    if high.met:
        return panel.verdict("grade III")
    if low.state == UNKNOWN:
        return panel.verdict(UNKNOWN, notes=("E/A is needed first.",))
    if low.met and slow.met:
        return panel.verdict("grade I")
    if low.met and slow.state == UNKNOWN:
        possible = {"grade I"} | open_marks
        note = () if len(possible) == 1 else ("E is needed beside a low E/A.",)
        return panel.verdict("grade I" if len(possible) == 1 else UNKNOWN, possible=possible, notes=note)
    return panel.verdict(by_marks, possible=open_marks)


def _marks_2016(states: list[State]) -> tuple[str, set[str]]:
    """Grade by the three marks, and what the missing ones leave open.

    Two of three decide; one for and one against, with the third missing, is indeterminate as published.
    """
    positive, negative = states.count("met"), states.count("unmet")
    if positive >= 2:
        return "grade II", {"grade II"}
    if negative >= 2:
        return "grade I", {"grade I"}
    is_split = positive == negative == 1
    return "indeterminate" if is_split else UNKNOWN, {"grade I", "indeterminate", "grade II"}


def _grade_2025(panel: Panel) -> Verdict:
    low, high = panel.judge("diastole.ratio.low").state, panel.judge("diastole.ratio.high").state
    ring = [panel.judge(f"diastole.{name}").state for name in ("septal", "lateral", "average")]
    ratios = ("diastole.e-over-e-prime", "diastole.e-over-e-prime.septal", "diastole.e-over-e-prime.lateral")
    filling = [panel.judge(name).state for name in ratios]
    pressure = [panel.judge(f"diastole.{name}").state for name in ("tricuspid", "pulmonary-pressure")]
    ties = [
        panel.judge(f"diastole.{name}").state
        for name in ("reservoir-strain", "pulmonary-vein", "atrium", "relaxation-time")
    ]
    relaxation = any_of(ring if UNKNOWN in ring[:2] and ring[2] == UNKNOWN else _measured(ring))
    tie = any_of(_measured(ties))
    by_forms = (low, high, relaxation, any_of(_measured(filling)), any_of(_measured(pressure)))
    strictly = (low, high, any_of(ring), any_of(filling), any_of(pressure))
    grades = {_decide_2025(case, tie) for case in _completions(by_forms)}
    open_ties: tuple[State, ...] = (tie, any_of(ties)) if any_of(ties) != UNKNOWN else (tie, "met", "unmet")
    possible = {_decide_2025(case, one) for case in _completions(strictly) for one in open_ties} | grades
    if len(grades) > 1:
        note = "E/A, e', E/e' and tricuspid velocity or pulmonary pressure are needed."
        return panel.verdict(UNKNOWN, possible=possible, notes=(note,))
    grade = grades.pop()
    note = "One mark only: strain, pulmonary vein, atrial volume or relaxation time would settle it."
    return panel.verdict(grade, possible=possible, notes=(note,) if grade == "indeterminate" else ())


def _decide_2025(case: tuple[State, ...], tie: State) -> str:
    """The grade when E/A, relaxation, filling and pressure are known; tie-breakers may be missing."""
    low, high, relaxation, filling, pressure = case
    marks = (relaxation, filling, pressure).count("met")
    raised = "grade III" if high == "met" else "grade II"
    if marks >= 2:
        return raised
    if marks == 0:
        return "normal"
    if relaxation == "met" and low == "met":
        return "grade I"
    if tie == UNKNOWN:
        return "indeterminate"
    if tie == "met":
        return raised
    return "grade I" if relaxation == "met" else "normal"


def _measured(states: list[State]) -> list[State]:
    """Several forms of one mark: those not measured do not make the mark unknown."""
    return [state for state in states if state != UNKNOWN]


def _completions(states: tuple[State, ...]) -> list[tuple[State, ...]]:
    """Every way in which the unknown states could turn out."""
    both: tuple[State, State] = ("met", "unmet")
    return list(product(*(both if state == UNKNOWN else (state,) for state in states)))
