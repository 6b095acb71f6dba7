"""The grammar of SMART scopes and how far they reach: rows SM-5, SM-6, SM-7, SM-9 (SMART App Launch 2.2)."""

from __future__ import annotations

from typing import Any

import pytest

from fhirgallop.service.auth.caller import NOBODY, STRANGER, Caller
from fhirgallop.service.auth.scopes import read_scope, read_scopes

CATEGORY = "http://terminology.hl7.org/CodeSystem/observation-category"
EXAM = f"category={CATEGORY}|exam"


@pytest.mark.parametrize(
    ("text", "does"),
    [
        ("system/Observation.rs", "rs"),
        ("system/Observation.cruds", "cruds"),
        ("system/Observation.c", "c"),
        ("system/*.s", "s"),
        ("patient/Observation.rs", "rs"),
        ("user/DiagnosticReport.cud", "cud"),
        # the first version reads as the second (table in "Scopes for requesting FHIR Resources")
        ("system/Observation.read", "rs"),
        ("system/Observation.write", "cud"),
        ("system/*.*", "cruds"),
        ("system/Observation.*", "cruds"),
    ],
)
def test_sm_5_7_scopes_of_both_versions(text: str, does: str) -> None:
    scope = read_scope(text)
    assert scope
    assert (f"{scope.context}/{scope.type}", scope.does) == (text.partition(".")[0], does)


@pytest.mark.parametrize(
    "text",
    [
        "system/Observation.sr", "system/Observation.rr", "system/Observation.", "system/Observation",
        "system/Observation.rx", "system/Observation.Read", "system/observation.rs", "system/.rs",
        "System/Observation.rs", "launch", "openid", "fhirUser", "offline_access", "system/Observation.rs.s",
        "system/Observation.rs?", "practitioner/Observation.rs", "system/Obs*.rs", "system//Observation.rs",
        "system/Observation.readwrite", " system/Observation.rs", "system/Observation.rs\n", "",
    ],
)  # fmt: skip
def test_sm_5_what_is_no_scope_is_none(text: str) -> None:
    """Letters out of order are refused, as the standard allows."""
    assert read_scope(text) is None


@pytest.mark.parametrize(
    "only",
    [
        "code=1", "category", "category=", f"{EXAM}&code=1", f"{EXAM}&", "category:in=http://x",
        f"{EXAM},{CATEGORY}|x",
        "category=a|b|c", f"category={CATEGORY}|", "_security=x", f"category={CATEGORY}%7Cexam%2Claboratory",
        "category=exam\\,x", "Category=exam", "category.text=exam",
    ],
)  # fmt: skip
def test_sm_9_a_restriction_that_cannot_be_kept_refuses_the_scope(only: str) -> None:
    """Never widened: a scope whose restriction is not understood gives no right at all."""
    assert read_scope(f"system/Observation.rs?{only}") is None
    assert read_scopes(f"system/Observation.rs?{only}").reach("Observation", "r").nothing


def test_sm_9_a_restriction_does_not_go_with_the_first_version() -> None:
    assert read_scope(f"system/Observation.read?{EXAM}") is None


def observation(*categories: tuple[str | None, str]) -> dict[str, Any]:
    codings = [{"system": s, "code": c} if s else {"code": c} for s, c in categories]
    return {"resourceType": "Observation", "category": [{"coding": [coding]} for coding in codings]}


@pytest.mark.parametrize(
    ("scope", "resource", "admitted"),
    [
        (EXAM, observation((CATEGORY, "exam")), True),
        (EXAM, observation((CATEGORY, "laboratory"), (CATEGORY, "exam")), True),
        (EXAM.replace("|", "%7C"), observation((CATEGORY, "exam")), True),
        (EXAM, observation((CATEGORY, "laboratory")), False),
        (EXAM, observation(("http://other.example", "exam")), False),
        (EXAM, observation((None, "exam")), False),
        (EXAM, observation(), False),
        (EXAM, {"resourceType": "Observation"}, False),
        (EXAM, {"resourceType": "Observation", "category": {"coding": {"code": "exam"}}}, False),
        (EXAM, {"resourceType": "Observation", "category": ["x", {"coding": ["x", {"code": 1}]}]}, False),
        ("category=exam", observation((None, "exam")), True),
        ("category=exam", observation((CATEGORY, "exam")), True),
        ("category=|exam", observation((CATEGORY, "exam")), False),
        ("category=|exam", observation((None, "exam")), True),
        (f"{EXAM}&category={CATEGORY}|imaging", observation((CATEGORY, "exam")), False),
        (f"{EXAM}&category={CATEGORY}|imaging", observation((CATEGORY, "exam"), (CATEGORY, "imaging")), True),
    ],
)  # fmt: skip
def test_sm_9_a_restriction_by_category_is_kept(scope: str, resource: Any, admitted: bool) -> None:
    reach = read_scopes(f"system/Observation.rs?{scope}").reach("Observation", "r")
    assert not reach.everything
    assert not reach.nothing
    assert reach.admits(resource) is admitted


def test_sm_6_a_letter_is_a_letter() -> None:
    caller = Caller("system", "sender", scopes=read_scopes("system/Observation.ru system/DiagnosticReport.s"))
    assert [does for does in "cruds" if caller.may("Observation", does)] == ["r", "u"]
    assert [does for does in "cruds" if caller.may("DiagnosticReport", does)] == ["s"]
    assert not any(caller.may("Provenance", does) for does in "cruds")


def test_scopes_add_up_and_a_free_one_frees() -> None:
    both = read_scopes(f"system/Observation.rs?{EXAM} system/Observation.r?category={CATEGORY}|vital-signs")
    reading = both.reach("Observation", "r")
    assert reading.admits(observation((CATEGORY, "vital-signs")))
    assert reading.admits(observation((CATEGORY, "exam")))
    assert not reading.admits(observation((CATEGORY, "laboratory")))
    assert not both.reach("Observation", "s").admits(observation((CATEGORY, "vital-signs")))
    assert read_scopes(f"system/Observation.rs?{EXAM} system/*.r").reach("Observation", "r").everything


def test_patient_and_user_scopes_give_nothing() -> None:
    """They hang on a launch context that this service does not have."""
    scopes = read_scopes("patient/*.cruds user/*.cruds launch/patient openid")
    assert scopes.understood == ()
    assert scopes.refused == 4
    assert scopes.reach("Observation", "r").nothing


def test_very_many_scopes_are_not_read() -> None:
    assert read_scopes("system/*.cruds " * 2000).understood == ()
    assert len(read_scopes("system/*.r " * 300).understood) == 200


def test_who_has_no_scopes_may_nothing_but_where_authorisation_is_off() -> None:
    for kind in ("cds", "person", "administrator"):
        assert not Caller(kind, "x").may("Observation", "r")  # type: ignore[arg-type]
    assert not STRANGER.may("Observation", "r")
    assert NOBODY.may("Observation", "r")
    assert NOBODY.reach("Anything", "d").everything
