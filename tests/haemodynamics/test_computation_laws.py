"""Laws that physiology and units impose on the formulas."""

from __future__ import annotations

from decimal import Decimal

import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from fhirgallop.haemodynamics import COMPUTATIONS, Refusal, Result
from fhirgallop.haemodynamics.tables import load

FEW = settings(max_examples=60, deadline=None)
TINY = Decimal("1E-20")


def value(name: str, **inputs: Decimal) -> Decimal:
    answer = COMPUTATIONS[name](**inputs)
    assume(isinstance(answer, Result))
    assert isinstance(answer, Result)
    return answer.value


def within(name: str) -> st.SearchStrategy[Decimal]:
    spec = load().inputs[name]
    return st.decimals(spec.least, spec.most, places=2)


@pytest.mark.parametrize("name", list(COMPUTATIONS))
def test_plausible_entries_give_a_finite_number_or_a_refusal(name: str) -> None:
    fields = (*COMPUTATIONS[name].spec.needs, *COMPUTATIONS[name].spec.may_use)

    @FEW
    @given(st.fixed_dictionaries({field: within(field) for field in fields}))
    def check(inputs: dict[str, Decimal]) -> None:
        answer = COMPUTATIONS[name](**inputs)
        if isinstance(answer, Refusal):
            assert {reason.kind for reason in answer.reasons} <= {"contradictory", "not-valid"}
        else:
            assert answer.value.is_finite()

    check()


RISING = [
    ("pressure.mean-arterial", "systolic_mmhg", 1),
    ("pressure.mean-arterial", "diastolic_mmhg", 1),
    ("pressure.proportional-pulse", "diastolic_mmhg", -1),
    ("pressure.venous-from-jugular", "jugular_height_cm", 1),
    ("gradient.bernoulli-simplified", "jet_velocity_m_per_s", 1),
    ("gradient.bernoulli-modified", "proximal_velocity_m_per_s", -1),
    ("right-heart.rvsp", "tr_velocity_m_per_s", 1),
    ("right-heart.rvsp", "right_atrial_mmhg", 1),
    ("right-heart.right-atrial-by-ivc", "ivc_diameter_cm", 1),
    ("right-heart.right-atrial-by-ivc", "ivc_collapse_percent", -1),
    ("right-heart.mean-pulmonary-chemla", "pasp_mmhg", 1),
    ("area.aortic-continuity", "lvot_diameter_cm", 1),
    ("area.aortic-continuity", "aortic_vti_cm", -1),
    ("area.aortic-hakki", "cardiac_output_l_per_min", 1),
    ("area.aortic-hakki", "aortic_mean_gradient_mmhg", -1),
    ("area.aortic-gorlin", "systolic_ejection_period_s", -1),
    ("area.mitral-gorlin", "mitral_mean_gradient_mmhg", -1),
    ("area.mitral-half-time", "mitral_half_time_ms", -1),
    ("area.mitral-deceleration", "mitral_deceleration_ms", -1),
    ("regurgitation.orifice", "pisa_radius_cm", 1),
    ("regurgitation.orifice", "regurgitant_velocity_cm_per_s", -1),
    ("regurgitation.fraction", "regurgitant_volume_ml", 1),
    ("regurgitation.fraction", "stroke_volume_ml", -1),
    ("flow.stroke-volume", "lvot_diameter_cm", 1),
    ("flow.stroke-volume-index", "body_surface_m2", -1),
    ("body.surface-mosteller", "weight_kg", 1),
    ("body.surface-dubois", "height_cm", 1),
    ("body.mass-index", "height_cm", -1),
    ("ecg.qtc-bazett", "heart_rate_per_min", 1),
    ("ecg.qtc-fridericia", "heart_rate_per_min", 1),
    ("ecg.qtc-framingham", "qt_ms", 1),
    ("ecg.qtc-hodges", "heart_rate_per_min", 1),
    ("diastole.average-e-over-e-prime", "average_e_prime_cm_per_s", -1),
    ("ventricle.mass", "septal_thickness_cm", 1),
    ("ventricle.relative-wall-thickness", "lv_internal_diameter_cm", -1),
    ("artery.ankle-brachial", "ankle_systolic_mmhg", 1),
    ("probability.post-test", "pretest_probability", 1),
    ("probability.post-test", "likelihood_ratio", 1),
    ("probability.ratio-positive", "specificity", 1),
    ("probability.ratio-negative", "sensitivity", -1),
]


@pytest.mark.parametrize(("name", "field", "direction"), RISING)
def test_more_of_this_moves_the_result_one_way(name: str, field: str, direction: int) -> None:
    needs = COMPUTATIONS[name].spec.needs

    @FEW
    @given(st.fixed_dictionaries({need: within(need) for need in needs}), within(field))
    def check(inputs: dict[str, Decimal], other: Decimal) -> None:
        low, high = sorted((inputs[field], other))
        change = value(name, **{**inputs, field: high}) - value(name, **{**inputs, field: low})
        assert change * direction >= -TINY

    check()


@FEW
@given(within("systolic_mmhg"), within("diastolic_mmhg"))
def test_mean_lies_between_and_pulse_pressure_adds_up(systolic: Decimal, diastolic: Decimal) -> None:
    mean = value("pressure.mean-arterial", systolic_mmhg=systolic, diastolic_mmhg=diastolic)
    assert diastolic < mean < systolic
    assert value("pressure.pulse", systolic_mmhg=systolic, diastolic_mmhg=diastolic) + diastolic == systolic


@FEW
@given(within("jet_velocity_m_per_s"), within("proximal_velocity_m_per_s"))
def test_the_modified_gradient_is_the_smaller_by_the_proximal_part(jet: Decimal, before: Decimal) -> None:
    modified = value(
        "gradient.bernoulli-modified", jet_velocity_m_per_s=jet, proximal_velocity_m_per_s=before
    )
    simplified = value("gradient.bernoulli-simplified", jet_velocity_m_per_s=jet)
    assert modified == simplified - 4 * before**2


@FEW
@given(within("lvot_diameter_cm"), within("lvot_vti_cm"), within("aortic_vti_cm"))
def test_continuity_is_stroke_volume_by_the_valve_integral(d: Decimal, v1: Decimal, v2: Decimal) -> None:
    area = value("area.aortic-continuity", lvot_diameter_cm=d, lvot_vti_cm=v1, aortic_vti_cm=v2)
    stroke = value("flow.stroke-volume", lvot_diameter_cm=d, lvot_vti_cm=v1)
    assert abs(area * v2 - stroke) < TINY


@FEW
@given(within("lvot_diameter_cm"), within("lvot_vti_cm"))
def test_a_diameter_twice_as_large_gives_four_times_the_volume(d: Decimal, vti: Decimal) -> None:
    assume(d <= 2)
    once = value("flow.stroke-volume", lvot_diameter_cm=d, lvot_vti_cm=vti)
    assert abs(value("flow.stroke-volume", lvot_diameter_cm=2 * d, lvot_vti_cm=vti) - 4 * once) < TINY


@FEW
@given(within("mitral_deceleration_ms"))
def test_both_mitral_areas_agree_when_half_time_is_0_29_of_deceleration(deceleration: Decimal) -> None:
    by_deceleration = value("area.mitral-deceleration", mitral_deceleration_ms=deceleration)
    by_half_time = value("area.mitral-half-time", mitral_half_time_ms=deceleration * Decimal("0.29"))
    assert abs(by_half_time / by_deceleration - 1) < Decimal("0.001")


@FEW
@given(within("qt_ms"))
def test_at_sixty_a_minute_every_correction_leaves_qt_alone(qt: Decimal) -> None:
    for name in ("bazett", "fridericia", "framingham", "hodges"):
        assert abs(value(f"ecg.qtc-{name}", qt_ms=qt, heart_rate_per_min=Decimal(60)) - qt) < TINY


@FEW
@given(within("pretest_probability"), st.decimals("0.01", 100, places=2))
def test_a_ratio_and_its_inverse_cancel(pretest: Decimal, ratio: Decimal) -> None:
    there = value("probability.post-test", pretest_probability=pretest, likelihood_ratio=ratio)
    back = COMPUTATIONS["probability.post-test"](pretest_probability=there, likelihood_ratio=1 / ratio)
    assume(isinstance(back, Result))
    assert isinstance(back, Result)
    assert abs(back.value - pretest) < TINY


@FEW
@given(within("pressure_kpa"))
def test_the_two_pressure_conversions_agree(kpa: Decimal) -> None:
    """1 kPa is 10.19716 cm of water (density 1 g/mL, standard gravity)."""
    water = kpa * Decimal("10.19716")
    assume(water <= 100)
    by_water = value("convert.water-column", pressure_cmh2o=water)
    assert abs(value("convert.kilopascal", pressure_kpa=kpa) - by_water) < Decimal("0.001")


def test_torr_and_water_against_a_general_unit_library() -> None:
    """Pint's own definitions of mmHg, kPa and cmH2O (general-purpose unit library)."""
    pint = pytest.importorskip("pint", reason="pint comes with ucumvert, which only the test extra installs")
    registry = pint.UnitRegistry()
    for name, given_name, unit in (
        ("convert.kilopascal", "pressure_kpa", "kilopascal"),
        ("convert.water-column", "pressure_cmh2o", "cmH2O"),
    ):
        ours = COMPUTATIONS[name](**{given_name: Decimal(10)})
        assert isinstance(ours, Result)
        theirs = registry.Quantity(10, unit).to("mmHg").magnitude
        assert float(ours.value) == pytest.approx(theirs, rel=1e-4)
