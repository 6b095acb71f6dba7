"""The tables are whole: ids, inputs, units, sources, and the registry built on them."""

from __future__ import annotations

import csv
import re
from decimal import Decimal
from importlib import resources

import pytest

import fhirgallop.haemodynamics as package
from fhirgallop.errors import AssetError, SettingsError
from fhirgallop.haemodynamics import CLASSIFICATIONS, COMPUTATIONS, Grade, derivable, gradable, tables
from fhirgallop.haemodynamics.tables import load

FILES = ("inputs.csv", "computations.csv", "classifications.csv", "conditions.csv", "cutoffs.csv")


def rows(name: str) -> list[dict[str, str]]:
    text = (resources.files("fhirgallop.haemodynamics") / "data" / name).read_text(encoding="utf-8")
    return list(csv.DictReader(text.splitlines(), strict=True))


def test_all_names_and_no_others_are_exported() -> None:
    assert all(hasattr(package, name) for name in package.__all__)
    assert len(package.__all__) <= 12


def test_ids_are_unique() -> None:
    assert len(load().inputs) == len(rows("inputs.csv"))
    assert len(COMPUTATIONS) == len(rows("computations.csv"))
    editions = [(row["id"], row["edition"]) for row in rows("classifications.csv")]
    assert len(editions) == len(set(editions))
    keys = [(row.id, edition) for row in load().cutoffs.rows for edition in row.editions]
    assert len(keys) == len(set(keys))


def test_every_row_has_a_source_and_says_how_it_is_known() -> None:
    for name in ("computations.csv", "classifications.csv"):
        for row in rows(name):
            assert row["source"], row["id"]
            assert row["access"] in tables.ACCESS
    assert {row["access"] for row in rows("cutoffs.csv")} <= set(tables.ACCESS)


def test_cutoffs_have_the_unit_of_their_input_and_lie_inside_its_range() -> None:
    for cutoff in load().cutoffs.rows:
        if not cutoff.input or isinstance(cutoff.value, bool):
            continue
        spec = load().inputs[cutoff.input]
        assert cutoff.unit == spec.unit, cutoff.id
        assert spec.least is not None
        assert spec.most is not None
        assert spec.least <= cutoff.value <= spec.most, cutoff.id


def test_a_result_name_carries_the_unit_of_the_input_it_feeds() -> None:
    for computation in COMPUTATIONS.values():
        if computation.spec.gives:
            assert load().inputs[computation.spec.gives].unit == computation.spec.unit, computation.id


def test_units_are_ucum() -> None:
    ucumvert = pytest.importorskip("ucumvert", reason="ucumvert comes with the test extra")
    parser = ucumvert.get_ucum_parser()
    units = {spec.unit for spec in load().inputs.values() if spec.unit}
    units |= {computation.spec.unit for computation in COMPUTATIONS.values()}
    for unit in units:
        parser.parse(unit)


def test_no_text_states_a_diagnosis_or_proposes_treatment() -> None:
    forbidden = re.compile(
        r"\b(you have|patient has|suffers|diagnos\w+|prescribe|administer|dose|mg/kg)\b", re.I
    )
    for name in FILES:
        for row in rows(name):
            for cell in row.values():
                assert not forbidden.search(cell), (name, cell)


def test_the_registry_finds_what_can_be_derived() -> None:
    found = {c.id for c in derivable(["systolic_mmhg", "diastolic_mmhg"])}
    assert found == {"pressure.mean-arterial", "pressure.pulse", "pressure.proportional-pulse"}
    assert derivable([]) == ()
    assert {c.id for c in gradable(["vena_contracta_cm"])} == {
        "mitral-regurgitation.severity",
        "aortic-regurgitation.severity",
        "tricuspid-regurgitation.severity",
    }


def test_a_site_sets_a_cutoff_and_the_criterion_shows_it() -> None:
    classify = CLASSIFICATIONS["diastole.atrial-fibrillation"]
    own = load().cutoffs.with_values({"diastole-af.e": 110})
    given = {
        "mitral_e_cm_per_s": 105,
        "septal_e_over_e_prime": 12,
        "mitral_deceleration_ms": 150,
        "tr_velocity_m_per_s": 2.5,
    }
    published, changed = classify(**given), classify(cutoffs=own, **given)
    assert isinstance(published, Grade)
    assert isinstance(changed, Grade)
    assert (published.grade, changed.grade) == ("raised", "undetermined")
    assert ">= 110" in changed.criterion("diastole-af.e").text
    assert load().cutoffs.find("diastole-af.e", "ase-2025").value == 100


@pytest.mark.parametrize(
    "values", [{"no.such": 1}, {"h2fpef.atrial-fibrillation": 1}, {"as.velocity.severe": float("nan")}]
)
def test_a_site_cutoff_that_cannot_be_is_refused(values: dict[str, float]) -> None:
    with pytest.raises(SettingsError, match="cut-off"):
        load().cutoffs.with_values(values)


def test_an_unknown_edition_is_refused() -> None:
    with pytest.raises(SettingsError, match="ase-2025"):
        CLASSIFICATIONS["diastole.grade"](edition="ase-1999")


@pytest.mark.parametrize(
    ("name", "old", "new", "message"),
    [
        ("computations.csv", "systolic_mmhg;diastolic_mmhg", "systolic_mmhg;dystolic_mmhg", "without a row"),
        ("cutoffs.csv", ",severe,", ",sevear,", "has no grade"),
        ("cutoffs.csv", ",0.40,", ",zero,", "not a number"),
        ("cutoffs.csv", ",seen,", ",rumour,", "none of"),
        ("inputs.csv", "mm[Hg],40,300,", "mm[Hg],400,300,", "needs a range"),
        ("conditions.csv", "area.aortic-gorlin;", "area.aortic-gurlin;", "of nothing"),
        (
            "classifications.csv",
            "acc-aha-2020,yes,Aortic stenosis: severity",
            "acc-aha-2020,no,Aortic",
            "default",
        ),
        ("inputs.csv", "sex,choice,Sex,,,,female;male", "sex,choice,Sex,,,", "number of cells"),
    ],
)
def test_a_faulty_table_is_refused(
    monkeypatch: pytest.MonkeyPatch, name: str, old: str, new: str, message: str
) -> None:
    original = resources.files

    class Changed:
        def __truediv__(self, part: str) -> Changed:
            self.name = part
            return self

        def read_text(self, encoding: str) -> str:
            text = (original("fhirgallop.haemodynamics") / "data" / self.name).read_text(encoding=encoding)
            return text.replace(old, new, 1) if self.name == name else text

    monkeypatch.setattr(tables.resources, "files", lambda _: Changed())
    with pytest.raises(AssetError, match=message):
        load.__wrapped__()


def test_numbers_are_read_exactly() -> None:
    cutoff = load().cutoffs.find("mr.orifice.severe", "acc-aha-2020")
    assert cutoff.value == Decimal("0.40")
    assert str(cutoff.value) == "0.40"
