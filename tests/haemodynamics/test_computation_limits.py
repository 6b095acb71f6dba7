"""Every computation refuses what lies outside its limits, says why, and never repeats the value given."""

from __future__ import annotations

import csv
from decimal import Context, Decimal, localcontext
from pathlib import Path

import pytest

from fhirgallop.haemodynamics import CLASSIFICATIONS, COMPUTATIONS, Grade, Refusal, Result
from fhirgallop.haemodynamics.tables import Condition, load

TABLE = Path(__file__).resolve().parent.parent / "cases" / "haemodynamics" / "worked_values.csv"


def _examples() -> dict[str, dict[str, Decimal]]:
    """One accepted set of inputs for every computation: from the worked values, else made here."""
    found: dict[str, dict[str, Decimal]] = {
        "pressure.paradox": {
            "expiratory_systolic_mmhg": Decimal(120),
            "continuous_systolic_mmhg": Decimal(106),
        },
        "pressure.venous-from-jugular": {"jugular_height_cm": Decimal(4)},
        "pulse.deficit": {"apical_rate_per_min": Decimal(96), "radial_rate_per_min": Decimal(82)},
        "gradient.peak-to-peak": {"lv_systolic_mmhg": Decimal(180), "aortic_systolic_mmhg": Decimal(120)},
        "right-heart.pasp": {"rvsp_mmhg": Decimal(45), "pulmonary_valve_gradient_mmhg": Decimal(10)},
        "right-heart.diastolic-gradient": {"pa_diastolic_mmhg": Decimal(18), "wedge_mmhg": Decimal(22)},
        "pressure.end-diastolic-step": {"lv_end_diastolic_mmhg": Decimal(20), "wedge_mmhg": Decimal(14)},
        "area.aortic-indexed": {"aortic_area_cm2": Decimal(1), "body_surface_m2": Decimal(2)},
        "flow.cardiac-output": {"stroke_volume_ml": Decimal(70), "heart_rate_per_min": Decimal(70)},
        "flow.cardiac-index": {"cardiac_output_l_per_min": Decimal(5), "body_surface_m2": Decimal(2)},
        "body.mass-index": {"height_cm": Decimal(170), "weight_kg": Decimal(70)},
        "ecg.rr-interval": {"heart_rate_per_min": Decimal(75)},
        "diastole.e-over-a": {"mitral_e_cm_per_s": Decimal(80), "mitral_a_cm_per_s": Decimal(60)},
        "diastole.average-e-prime": {
            "septal_e_prime_cm_per_s": Decimal(8),
            "lateral_e_prime_cm_per_s": Decimal(12),
        },
        "diastole.lateral-e-over-e-prime": {
            "mitral_e_cm_per_s": Decimal(80),
            "lateral_e_prime_cm_per_s": Decimal(10),
        },
        "ventricle.mass": {
            "lv_internal_diameter_cm": Decimal(5),
            "septal_thickness_cm": Decimal(1),
            "posterior_wall_cm": Decimal(1),
        },
        "ventricle.mass-index": {"lv_mass_g": Decimal(180), "body_surface_m2": Decimal(2)},
        "ventricle.relative-wall-thickness": {
            "posterior_wall_cm": Decimal(1),
            "lv_internal_diameter_cm": Decimal(5),
        },
        "artery.ankle-brachial": {"ankle_systolic_mmhg": Decimal(110), "arm_systolic_mmhg": Decimal(120)},
        "convert.velocity": {"velocity_m_per_s": Decimal("0.9")},
    }
    with TABLE.open(encoding="utf-8", newline="") as file:
        for row in csv.DictReader(file):
            if row["id"] in COMPUTATIONS:
                pairs = (part.split("=") for part in row["inputs"].split(";"))
                found.setdefault(row["id"], {name: Decimal(text) for name, text in pairs})
    return found


EXAMPLES = _examples()
NUMBERS = [(name, field) for name, values in EXAMPLES.items() for field in values]
REFUSING = [c for rows in load().conditions.values() for c in rows if c.effect == "refuse"]


def test_every_computation_has_an_accepted_example() -> None:
    assert set(EXAMPLES) == set(COMPUTATIONS)
    for name, values in EXAMPLES.items():
        answer = COMPUTATIONS[name](**values)
        assert isinstance(answer, Result), (name, str(answer))
        assert {given.name for given in answer.inputs} == set(values)
        assert answer.unit == COMPUTATIONS[name].spec.unit
        assert answer.source


@pytest.mark.parametrize(("name", "field"), NUMBERS)
def test_outside_the_range_is_refused_by_name_and_without_the_value(name: str, field: str) -> None:
    spec = load().inputs[field]
    assert spec.least is not None
    assert spec.most is not None
    for value in (spec.least - Decimal("0.0371"), spec.most + Decimal("7.0371")):
        answer = COMPUTATIONS[name](**{**EXAMPLES[name], field: value})
        assert isinstance(answer, Refusal)
        reason = next(reason for reason in answer.reasons if reason.input == field)
        assert reason.kind == "out-of-range"
        assert spec.unit in reason.limit
        assert str(value) not in str(answer)


@pytest.mark.parametrize(("name", "field"), NUMBERS)
def test_not_a_number_is_refused(name: str, field: str) -> None:
    for value in (float("nan"), float("inf"), Decimal("NaN"), Decimal("1E+999999"), 10**5000):
        answer = COMPUTATIONS[name](**{**EXAMPLES[name], field: value})
        assert isinstance(answer, Refusal)
        assert [reason.kind for reason in answer.reasons if reason.input == field] == ["not-a-number"]


@pytest.mark.parametrize("name", list(COMPUTATIONS))
def test_all_missing_inputs_are_named_at_once(name: str) -> None:
    answer = COMPUTATIONS[name]()
    assert isinstance(answer, Refusal)
    assert answer.missing == COMPUTATIONS[name].spec.needs


@pytest.mark.parametrize("name", list(COMPUTATIONS))
def test_a_wrong_name_or_kind_is_the_programmers_mistake(name: str) -> None:
    first = COMPUTATIONS[name].spec.needs[0]
    with pytest.raises(TypeError, match="knows no input"):
        COMPUTATIONS[name](**EXAMPLES[name], blood_pressure=120)
    for wrong in ("120", True):
        with pytest.raises(TypeError):
            COMPUTATIONS[name](**{**EXAMPLES[name], first: wrong})


def _breaking(condition: Condition) -> Decimal | bool:
    """A value on the refusing side of a condition."""
    if isinstance(condition.value, bool):
        return condition.value
    return condition.value + {"<": Decimal(-1), ">": Decimal(1)}.get(condition.comparator, Decimal(0))


@pytest.mark.parametrize(
    "condition", REFUSING, ids=[f"{c.of}-{c.input}-{c.comparator}{c.value}" for c in REFUSING]
)
def test_every_condition_refuses_when_known_and_warns_when_unknown(condition: Condition) -> None:
    call = COMPUTATIONS.get(condition.of) or CLASSIFICATIONS[condition.of]
    example = EXAMPLES.get(condition.of, {})
    without = call(**{name: value for name, value in example.items() if name != condition.input})
    if condition.input not in example:
        assert isinstance(without, Result | Grade)
        assert any(text.endswith(condition.text) for text in without.unrecorded)
    broken = call(**{**example, condition.input: _breaking(condition)})
    assert isinstance(broken, Refusal)
    assert [(r.kind, r.input, r.text) for r in broken.reasons if r.kind == "not-valid"] == [
        ("not-valid", condition.input, condition.text)
    ]
    if isinstance(condition.value, bool):
        held = call(**{**example, condition.input: not condition.value})
        assert isinstance(held, Result | Grade)
        assert f"{load().inputs[condition.input].label}: {condition.text}" not in held.unrecorded


@pytest.mark.parametrize(
    ("name", "inputs", "named"),
    [
        ("pressure.mean-arterial", {"systolic_mmhg": 80, "diastolic_mmhg": 120}, "diastolic_mmhg"),
        ("pressure.pulse", {"systolic_mmhg": 80, "diastolic_mmhg": 80}, "diastolic_mmhg"),
        ("pressure.proportional-pulse", {"systolic_mmhg": 80, "diastolic_mmhg": 81}, "diastolic_mmhg"),
        (
            "pressure.paradox",
            {"expiratory_systolic_mmhg": 100, "continuous_systolic_mmhg": 101},
            "continuous_systolic_mmhg",
        ),
        ("pulse.deficit", {"apical_rate_per_min": 70, "radial_rate_per_min": 81}, "radial_rate_per_min"),
        (
            "gradient.bernoulli-simplified",
            {"jet_velocity_m_per_s": 1.0, "proximal_velocity_m_per_s": 1.2},
            "proximal_velocity_m_per_s",
        ),
        (
            "gradient.bernoulli-modified",
            {"jet_velocity_m_per_s": 1.2, "proximal_velocity_m_per_s": 1.2},
            "proximal_velocity_m_per_s",
        ),
        (
            "gradient.peak-to-peak",
            {"lv_systolic_mmhg": 120, "aortic_systolic_mmhg": 121},
            "aortic_systolic_mmhg",
        ),
        ("ratio.dimensionless", {"lvot_vti_cm": 40, "aortic_vti_cm": 20}, "aortic_vti_cm"),
        ("ecg.qtc-bazett", {"qt_ms": 600, "heart_rate_per_min": 100}, "qt_ms"),
        (
            "right-heart.pasp",
            {"rvsp_mmhg": 40, "pulmonary_valve_gradient_mmhg": 40},
            "pulmonary_valve_gradient_mmhg",
        ),
        (
            "area.aortic-gorlin",
            {
                "cardiac_output_l_per_min": 5,
                "heart_rate_per_min": 200,
                "systolic_ejection_period_s": 0.33,
                "aortic_mean_gradient_mmhg": 50,
            },
            "systolic_ejection_period_s",
        ),
        (
            "area.aortic-hakki",
            {"cardiac_output_l_per_min": 5, "aortic_mean_gradient_mmhg": 0},
            "aortic_mean_gradient_mmhg",
        ),
        ("probability.post-test", {"pretest_probability": 0.3, "likelihood_ratio": 0}, "likelihood_ratio"),
        (
            "probability.post-test",
            {"pretest_probability": 0.3, "likelihood_ratio": 1.6, "ratio_low": 0.47, "ratio_high": 5.5},
            "ratio_low",
        ),
        (
            "probability.post-test",
            {"pretest_probability": 0.3, "likelihood_ratio": 0.62, "ratio_low": 0.7, "ratio_high": 0.9},
            "ratio_low",
        ),
        ("probability.ratio-positive", {"sensitivity": 0.9, "specificity": 1}, "specificity"),
        ("probability.ratio-negative", {"sensitivity": 0.9, "specificity": 0}, "specificity"),
    ],
)
def test_entries_that_cannot_belong_together(name: str, inputs: dict[str, float], named: str) -> None:
    answer = COMPUTATIONS[name](**inputs)
    assert isinstance(answer, Refusal)
    assert [(reason.kind, reason.input) for reason in answer.reasons] == [("contradictory", named)]


def test_proximal_velocity_of_1_5_sends_to_the_modified_equation() -> None:
    simplified = COMPUTATIONS["gradient.bernoulli-simplified"]
    below = simplified(jet_velocity_m_per_s=4, proximal_velocity_m_per_s=1.49)
    assert isinstance(below, Result)
    assert below.value == 64
    assert isinstance(simplified(jet_velocity_m_per_s=4, proximal_velocity_m_per_s=1.5), Refusal)


def test_a_ratio_of_zero_from_full_sensitivity_carries_its_warning() -> None:
    answer = COMPUTATIONS["probability.ratio-negative"](sensitivity=1, specificity=0.9)
    assert isinstance(answer, Result)
    assert any("below 0.1" in caveat for caveat in answer.caveats)


def test_float_integer_and_decimal_give_the_same_and_the_callers_context_does_not_matter() -> None:
    area = COMPUTATIONS["area.aortic-continuity"]
    by_float = area(lvot_diameter_cm=2.0, lvot_vti_cm=20.0, aortic_vti_cm=100.0)
    with localcontext(Context(prec=3)):
        by_decimal = area(lvot_diameter_cm=Decimal("2.0"), lvot_vti_cm=Decimal(20), aortic_vti_cm=100)
    assert isinstance(by_float, Result)
    assert isinstance(by_decimal, Result)
    assert by_float.value == by_decimal.value
    assert by_float.shown() == "0.63"


def test_exact_where_the_formula_is_rational() -> None:
    answer = COMPUTATIONS["right-heart.rvsp"](tr_velocity_m_per_s=2.8, right_atrial_mmhg=3)
    assert isinstance(answer, Result)
    assert answer.value == Decimal("34.36")
