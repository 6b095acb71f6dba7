"""The traps in the published rules: zones, units, contained resources, absent elements, defects.

Each case names the rule that must, or must not, come out for a whole resource.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from decimal import Decimal
from typing import Any

import pytest

from fhirgallop.conformance import corrections, invariants, references
from fhirgallop.conformance.editions.edition import NAMES, Edition, load
from fhirgallop.conformance.editions.model import Invariant
from fhirgallop.conformance.fhirpath import compile_expression
from fhirgallop.conformance.node import Node, Scope
from fhirgallop.outcome import Issue

Walk = Callable[[Node, Edition], Iterator[Node]]
UCUM = "http://unitsofmeasure.org"


@pytest.fixture
def issues_of(walk_nodes: Walk) -> Callable[[dict[str, Any], str], list[Issue]]:
    def run(resource: dict[str, Any], name: str = "R4") -> list[Issue]:
        edition = load(name)
        root = Node(resource, resource["resourceType"])
        scope = Scope(edition, root, references.resolver(root, edition))
        return [
            i
            for node in walk_nodes(root, edition)
            for i in invariants.check(node, scope)
            if i.rule != "dom-6"
        ]

    return run


def _keys(issues: list[Issue]) -> set[str]:
    return {issue.rule for issue in issues}


def _period(start: str, end: str) -> dict[str, Any]:
    return {"resourceType": "Encounter", "status": "finished", "period": {"start": start, "end": end}}


@pytest.mark.parametrize(
    ("start", "end", "fails"),
    [
        (
            "2020-01-01T12:00:00Z",
            "2020-01-01T12:30:00+01:00",
            True,
        ),  # 11:30Z: a text comparison would miss it
        ("2020-01-01T12:30:00+01:00", "2020-01-01T12:00:00Z", False),
        ("2020-01-01T00:30:00+02:00", "2019-12-31T23:00:00Z", False),  # across midnight
        ("2020-01-02", "2020-01-01", True),
        ("2020-01-01", "2020-01-01", False),
        ("2019", "2020-01-01", False),  # the year decides
        ("2020", "2020-01-01", True),  # undecided: an empty result is no true
        ("2020-01-01", "2020-01-01T10:00:00Z", True),  # the same, a day against a moment
    ],
)
def test_period_in_r4_is_ordered_with_zones_and_precision(start, end, fails, issues_of) -> None:
    assert ("per-1" in _keys(issues_of(_period(start, end)))) is fails


@pytest.mark.parametrize(
    ("start", "end", "fails"),
    [
        ("2020", "2020-01-01", False),  # R5 compares the earliest start with the latest end
        ("2020-01-01", "2020-01-01T10:00:00Z", False),
        ("2020-01-02", "2020-01-01", True),
        ("2020-01-01T12:00:00Z", "2020-01-01T12:30:00+01:00", True),
        ("2020-01-01T12:00:00Z", "2020-01-01T12:00:00Z", False),
    ],
)
def test_period_in_r5_is_ordered_by_its_boundaries(start, end, fails, issues_of) -> None:
    resource = {"resourceType": "Patient", "name": [{"period": {"start": start, "end": end}}]}
    assert ("per-1" in _keys(issues_of(resource, "R5"))) is fails


def _quantity(value: object, code: str) -> dict[str, Any]:
    return {"value": value, "system": UCUM, "code": code, "unit": code}


@pytest.mark.parametrize(
    ("low", "high", "fails"),
    [
        (_quantity(500, "mg"), _quantity(1, "g"), False),
        (_quantity(2000, "mg"), _quantity(1, "g"), True),
        (_quantity(Decimal("1.0"), "m/s"), _quantity(90, "cm/s"), True),
        (_quantity(1, "mm[Hg]"), _quantity(1, "kPa"), False),
        (_quantity(8, "mm[Hg]"), _quantity(1, "kPa"), True),
        (_quantity(5, "mg"), _quantity(1, "mL"), False),  # not comparable: nothing to say
        (_quantity(5, "{score}"), _quantity(1, "{score}"), True),
        ({"value": 5, "unit": "apples"}, {"value": 1, "unit": "apples"}, True),
        ({"unit": "mg"}, {"value": 1, "unit": "mg"}, False),
    ],
)
@pytest.mark.parametrize("name", ["R4", "R4B"])
def test_range_is_ordered_across_units(low, high, fails, name, issues_of) -> None:
    resource = {"resourceType": "Observation", "valueRange": {"low": low, "high": high}}
    assert ("rng-2" in _keys(issues_of(resource, name))) is fails


def _with_contained(body: dict[str, Any], inner: dict[str, Any] | None = None) -> dict[str, Any]:
    contained = {"resourceType": "Organization", "id": "o", "name": "a", **(inner or {})}
    return {"resourceType": "Patient", "contained": [contained], **body}


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize(
    ("resource", "expected"),
    [
        (_with_contained({"managingOrganization": {"reference": "#o"}}), set()),
        (_with_contained({"extension": [{"url": "http://a.example", "valueUri": "#o"}]}), set()),
        (_with_contained({"extension": [{"url": "http://a.example", "valueCanonical": "#o"}]}), set()),
        (_with_contained({}), {"dom-3"}),
        (_with_contained({"managingOrganization": {"reference": "Organization/o"}}), {"dom-3"}),
        (_with_contained({}, {"partOf": {"reference": "#"}}), set()),  # it points back to its container
        (_with_contained({"managingOrganization": {"reference": "#p"}}), {"dom-3", "ref-1"}),
        (
            _with_contained({"managingOrganization": {"reference": "#o"}}, {"meta": {"versionId": "1"}}),
            {"dom-4"},
        ),
        (_with_contained({"managingOrganization": {"display": "a"}, "contained": []}), set()),
        ({"resourceType": "Patient", "managingOrganization": {"reference": "#"}}, {"ref-1"}),
    ],
)
def test_contained_resources_and_references_to_them(resource, expected, name, issues_of) -> None:
    assert _keys(issues_of(resource, name)) == expected


@pytest.mark.parametrize("name", NAMES)
def test_contained_is_looked_up_in_the_entry_not_in_the_bundle(name, issues_of) -> None:
    entry = {
        "fullUrl": "http://a.example/Patient/1",
        "resource": _with_contained({"managingOrganization": {"reference": "#o"}}),
    }
    other = {
        "fullUrl": "http://a.example/Patient/2",
        "resource": {"resourceType": "Patient", "managingOrganization": {"reference": "#o"}},
    }
    found = issues_of({"resourceType": "Bundle", "type": "collection", "entry": [entry, other]}, name)
    assert [(i.rule, i.expression) for i in found] == [
        ("ref-1", "Bundle.entry[1].resource.managingOrganization"),
    ]


def _observation(**more: Any) -> dict[str, Any]:
    return {"resourceType": "Observation", "status": "final", "code": {"text": "a"}, **more}


def _code(*pairs: tuple[str, str]) -> dict[str, Any]:
    return {"coding": [{"system": system, "code": code} for system, code in pairs]}


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize(
    ("resource", "expected"),
    [
        (_observation(valueBoolean=False, dataAbsentReason={"text": "a"}), {"obs-6"}),
        (
            _observation(
                _valueString={"extension": [{"url": "http://a.example", "valueCode": "a"}]},
                dataAbsentReason={"text": "a"},
            ),
            {"obs-6"},
        ),
        (
            _observation(component=[{"code": {"text": "a"}, "referenceRange": [{"type": {"text": "a"}}]}]),
            {"obs-3"},
        ),
        (_observation(referenceRange=[{"high": {"value": 1, "comparator": "<"}}]), {"sqty-1"}),
        (
            _observation(
                code=_code(("a", "1"), ("b", "2")), valueString="x", component=[{"code": _code(("b", "2"))}]
            ),
            {"obs-7"},
        ),
        (_observation(code=_code(("a", "1"), ("b", "2")), component=[{"code": _code(("b", "2"))}]), set()),
        (
            _observation(code=_code(("a", "1")), valueString="x", component=[{"code": _code(("b", "1"))}]),
            set(),
        ),
        (_observation(valueQuantity={"value": 1, "code": "mm"}), {"qty-3"}),
        (_observation(extension=[{"url": "http://a.example"}]), {"ext-1"}),
        (
            _observation(
                extension=[
                    {
                        "url": "http://a.example",
                        "valueCode": "a",
                        "extension": [{"url": "b", "valueCode": "a"}],
                    }
                ]
            ),
            {"ext-1"},
        ),
    ],
)
def test_observation_rules(resource, expected, name, issues_of) -> None:
    assert _keys(issues_of(resource, name)) == expected


@pytest.mark.parametrize("name", NAMES)
def test_missing_required_element_is_not_reported_twice(name, issues_of) -> None:
    # without Bundle.type every rule of the form "type = ... implies ..." is empty; cardinality speaks
    resource = {
        "resourceType": "Bundle",
        "entry": [{"resource": {"resourceType": "Patient"}, "fullUrl": "urn:uuid:1"}],
    }
    assert issues_of(resource, name) == []


@pytest.mark.parametrize("name", NAMES)
def test_document_bundle_without_entries_breaks_its_rules(name, issues_of) -> None:
    resource = {"resourceType": "Bundle", "type": "document", "timestamp": "2020-01-01T00:00:00Z"}
    assert _keys(issues_of(resource, name)) == {"bdl-9", "bdl-11"}


@pytest.mark.parametrize("name", NAMES)
def test_every_kind_of_when_is_looked_at(name, issues_of) -> None:
    timing = {"repeat": {"offset": 30, "when": ["ACM", "CD"]}}
    resource = {"resourceType": "MedicationRequest", "dosageInstruction": [{"timing": timing}]}
    assert "tim-9" in _keys(issues_of(resource, name))
    timing["repeat"]["when"] = ["ACM", "PCD"]
    assert "tim-9" not in _keys(issues_of(resource, name))


def _questionnaire(**item: Any) -> dict[str, Any]:
    return {
        "resourceType": "Questionnaire",
        "status": "draft",
        "item": [{"linkId": "1", "type": "string", **item}],
    }


def test_r4_questionnaire_conditions(issues_of) -> None:
    exists = {"question": "2", "operator": "exists", "answerBoolean": True}
    assert _keys(issues_of(_questionnaire(enableWhen=[exists]))) == set()
    assert _keys(issues_of(_questionnaire(enableWhen=[exists, exists]))) == {"que-12"}
    assert _keys(
        issues_of(_questionnaire(enableWhen=[{**exists, "answerBoolean": None, "answerString": "a"}]))
    ) == {"que-7"}


def test_r4_entry_without_full_url_and_reference_without_reference_hold(issues_of) -> None:
    entry = {"resource": {"resourceType": "Patient", "managingOrganization": {"display": "a"}}}
    assert _keys(issues_of({"resourceType": "Bundle", "type": "collection", "entry": [entry]})) == set()


@pytest.mark.parametrize(
    ("member", "expected"),
    [
        ({"reference": "Practitioner/1"}, set()),
        ({"reference": "Organization/1"}, {"ctm-1"}),
        ({"reference": "http://a.example/fhir/Organization/1"}, {"ctm-1"}),
        ({"reference": "urn:uuid:d6c0d1c5-6e4f-4b41-9c4c-7d5f3d6a3d10"}, {invariants.NOT_JUDGED}),
        ({"reference": "urn:uuid:d6c0d1c5-6e4f-4b41-9c4c-7d5f3d6a3d10", "type": "Practitioner"}, set()),
    ],
)
@pytest.mark.parametrize("name", NAMES)
def test_target_of_unknown_type_is_said_not_to_be_judged(member, expected, name, issues_of) -> None:
    participant = {"member": member, "onBehalfOf": {"reference": "Organization/2"}}
    found = issues_of({"resourceType": "CareTeam", "participant": [participant]}, name)
    assert _keys(found) == expected
    assert all(i.severity == "warning" for i in found if i.rule == invariants.NOT_JUDGED)


@pytest.mark.parametrize(
    ("expression", "says"),
    [
        ("name.where(", "operand is missing|breaks off"),
        ("", "no expression"),
        ("nonsense()", "nonsense"),
        ("name.given.startsWith('a')", "several values"),
        ("birthDate <= today()", "present time"),
        ("name.first().family.matches('(?=a)a')", "regular expression"),
        ("maritalStatus.memberOf('http://a.example/ValueSet/none')", "value set"),
        ("conformsTo('http://a.example/StructureDefinition/none')", "profile"),
        ("managingOrganization.resolve().name.exists()", "not at hand"),
        ("%unheard.exists()", "variable"),
    ],
)
def test_profile_rule_that_cannot_be_judged_is_a_warning(expression, says) -> None:
    edition = load("R4")
    value = {
        "resourceType": "Patient",
        "name": [{"family": "a", "given": ["a", "b"]}],
        "birthDate": "2000-01-01",
        "maritalStatus": {"text": "a"},
        "managingOrganization": {"reference": "Organization/1"},
    }
    root = Node(value, "Patient")
    scope = Scope(edition, root, references.resolver(root, edition))
    [issue] = invariants.check_one(root, Invariant("x-1", "error", expression, "Something holds."), scope)
    assert (issue.severity, issue.code, issue.rule) == ("warning", "not-supported", invariants.NOT_JUDGED)
    assert any(part in issue.text for part in says.split("|"))
    assert "x-1" in issue.text


def test_side_that_cannot_be_judged_does_not_matter_where_the_other_decides() -> None:
    edition = load("R4")
    root = Node({"resourceType": "Patient", "active": True}, "Patient")
    scope = Scope(edition, root, references.resolver(root, edition))
    for expression in (
        "nonsense() or active",
        "active or nonsense()",
        "(active.not() and nonsense()).not()",
        "nonsense() implies active",
    ):
        assert list(invariants.check_one(root, Invariant("x-1", "error", expression, ""), scope)) == []


def test_every_correction_is_of_a_published_rule_and_compiles() -> None:
    published = {
        i.expression
        for name in NAMES
        for type_name in load(name).types
        for i in (
            *load(name).type(type_name).invariants,
            *(i for e in load(name).type(type_name).elements.values() for i in e.invariants),
        )
    }
    for row in corrections.CORRECTIONS.values():
        compile_expression(row.run)
        assert row.defect
        assert row.run != row.published
        # vs-1 stands in the core's vital-signs profiles, not on a type
        assert row.published in published or "dateTime" in row.published


def test_rules_over_a_whole_bundle_stay_within_their_bound(issues_of) -> None:
    entries = [
        {
            "fullUrl": f"http://a.example/Patient/{number}",
            "resource": _with_contained({"id": str(number), "managingOrganization": {"reference": "#o"}}),
        }
        for number in range(3000)
    ]
    entries.append(entries[0])
    for name in NAMES:
        found = issues_of({"resourceType": "Bundle", "type": "collection", "entry": entries}, name)
        assert _keys(found) == {"bdl-7"}


def test_rule_that_would_take_too_long_is_said_not_to_be_judged(issues_of) -> None:
    actors = [{"key": str(number), "type": "person", "title": str(number)} for number in range(1200)]
    steps = [{"operation": {"title": "x", "initiator": "none"}} for _ in range(1200)]
    resource = {
        "resourceType": "ExampleScenario",
        "status": "active",
        "actor": actors,
        "process": [{"title": "p", "step": steps}],
    }
    found = issues_of(resource, "R5")
    assert any(i.rule == invariants.NOT_JUDGED and "too long" in i.text for i in found)
