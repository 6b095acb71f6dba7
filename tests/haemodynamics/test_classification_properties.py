"""What must hold for every classification in every edition, whatever is measured and whatever is missing."""

from __future__ import annotations

from decimal import Decimal

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from fhirgallop.haemodynamics import CLASSIFICATIONS, Grade, Refusal
from fhirgallop.haemodynamics.tables import load

EDITIONS = [(name, edition) for name, c in CLASSIFICATIONS.items() for edition in c.editions]
IDS = [f"{name}@{edition}" for name, edition in EDITIONS]
QUIET = settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.too_slow])


def near_the_cutoffs(name: str, edition: str, field: str) -> st.SearchStrategy[object]:
    """Values of an input, most of them at and beside its cut-offs, where mistakes live."""
    spec = load().inputs[field]
    if spec.kind == "flag":
        return st.booleans()
    if spec.kind == "choice":
        return st.sampled_from(spec.choices)
    assert spec.least is not None
    assert spec.most is not None
    limits = [
        c.value
        for c in load().cutoffs.of(name, edition)
        if c.input == field and not isinstance(c.value, bool)
    ]
    beside = [limit + step for limit in limits for step in (Decimal("-0.01"), Decimal(0), Decimal("0.01"))]
    inside = [value for value in beside if spec.least <= value <= spec.most]
    anywhere = st.decimals(spec.least, spec.most, places=2)
    return st.one_of(st.sampled_from(inside), anywhere) if inside else anywhere


def harmless(name: str, edition: str) -> dict[str, st.SearchStrategy[object]]:
    """All inputs of an edition, without those that only serve to refuse."""
    refusing = {c.input for c in CLASSIFICATIONS[name].conditions if c.effect == "refuse"}
    fields = next(s for s in load().schemes[name] if s.edition == edition).may_use
    return {field: near_the_cutoffs(name, edition, field) for field in fields if field not in refusing}


@pytest.mark.parametrize(("name", "edition"), EDITIONS, ids=IDS)
def test_nothing_measured_is_unknown_never_normal(name: str, edition: str) -> None:
    grade = CLASSIFICATIONS[name](edition=edition)
    assert isinstance(grade, Grade)
    assert not any(criterion.state != "unknown" for criterion in grade.criteria)
    if name != "score.h2fpef":
        assert grade.grade == "unknown"
    assert len(grade.possible) > 1


@pytest.mark.parametrize(("name", "edition"), EDITIONS, ids=IDS)
def test_what_is_missing_leaves_the_true_grade_possible(name: str, edition: str) -> None:
    """The grade by all measurements is among the grades left open when any of them are missing."""

    @QUIET
    @given(st.fixed_dictionaries(harmless(name, edition)), st.data())
    def check(full: dict[str, object], data: st.DataObject) -> None:
        dropped = data.draw(st.sets(st.sampled_from(sorted(full))))
        classify = CLASSIFICATIONS[name]
        whole = classify(edition=edition, **full)  # type: ignore[arg-type]
        part = classify(edition=edition, **{k: v for k, v in full.items() if k not in dropped})  # type: ignore[arg-type]
        if isinstance(whole, Refusal):
            return
        assert isinstance(part, Grade)
        assert part.grade in (*part.possible, "unknown")
        if whole.known:
            assert whole.grade in part.possible
        states = {criterion.id: criterion.state for criterion in whole.criteria}
        for criterion in part.criteria:
            assert criterion.state in ("unknown", states.get(criterion.id, criterion.state))

    check()


@pytest.mark.parametrize(("name", "edition"), EDITIONS, ids=IDS)
def test_a_grade_names_source_inputs_and_edition(name: str, edition: str) -> None:
    @settings(max_examples=20, deadline=None)
    @given(st.fixed_dictionaries(harmless(name, edition)))
    def check(full: dict[str, object]) -> None:
        grade = CLASSIFICATIONS[name](edition=edition, **full)  # type: ignore[arg-type]
        if isinstance(grade, Refusal):
            return
        assert grade.edition == edition
        assert grade.source
        assert {given.name: given.value for given in grade.inputs} == full
        assert all(given.unit == load().inputs[given.name].unit for given in grade.inputs)

    check()
