"""Entries of a Bundle that are alike are judged in one call: one that is wrong is never let through."""

from __future__ import annotations

from collections.abc import Callable
from copy import deepcopy
from typing import Any

import pytest

from fhirgallop.conformance import fast
from fhirgallop.conformance.registry import registry
from fhirgallop.conformance.source import read
from fhirgallop.conformance.validator import thorough
from fhirgallop.outcome import ordered

EDITIONS = ("R4", "R4B", "R5")
SNOMED = "http://snomed.info/sct"
URN = "urn:uuid:0f8fad5b-d9cb-469f-a165-7086772895{:02}"
PATIENT, PLACE = 0, 3  # where the Patient stands, and the entry that is changed
Change = Callable[[dict[str, Any]], None]


def bundle(kind: str = "transaction") -> dict[str, Any]:
    """A Patient and six Observations that differ in nothing but their names."""
    text = {"status": "generated", "div": '<div xmlns="http://www.w3.org/1999/xhtml"><p>Pulse</p></div>'}
    resources: list[dict[str, Any]] = [{"resourceType": "Patient", "text": text, "active": True}]
    resources += [
        {
            "resourceType": "Observation",
            "text": text,
            "status": "final",
            "code": {"coding": [{"system": SNOMED, "code": f"8499900{n}"}], "text": "Pulse"},
            "subject": {"reference": URN.format(PATIENT)},
            "effectiveDateTime": "2026-03-04",
            "performer": [{"display": "Examiner"}],
            "valueString": "regular",
        }
        for n in range(6)
    ]
    entries = [
        {"fullUrl": URN.format(n), "resource": r, "request": {"method": "POST", "url": r["resourceType"]}}
        for n, r in enumerate(deepcopy(resources))
    ]
    if kind == "collection":
        for entry in entries:
            del entry["request"]
    return {"resourceType": "Bundle", "type": kind, "entry": entries}


def settled(value: dict[str, Any], edition: str) -> bool:
    """Whether the fast pass settled it; then the thorough one must say the same."""
    found = fast.settle(value, registry(edition))
    assert found is None or ordered(found) == thorough(read(value), registry(edition))
    return found is not None


@pytest.mark.parametrize("edition", EDITIONS)
@pytest.mark.parametrize("kind", ["transaction", "batch", "collection"])
def test_entries_that_are_alike_are_settled(edition: str, kind: str) -> None:
    assert settled(bundle(kind), edition)


def _value(**values: Any) -> Change:
    def change(entry: dict[str, Any]) -> None:
        del entry["resource"]["valueString"]
        entry["resource"].update(values)

    return change


def _component(code: str) -> Change:
    concept = {"coding": [{"system": SNOMED, "code": code}]}
    return lambda entry: entry["resource"].update(component=[{"code": concept, "valueString": "x"}])


def _range(low: float, high: float) -> Change:
    unit = {"unit": "cm", "system": "http://unitsofmeasure.org", "code": "cm"}
    return _value(valueRange={"low": {"value": low, **unit}, "high": {"value": high, **unit}})


RIGHT: dict[str, Change] = {
    "a code with a space inside": lambda e: e["resource"]["code"]["coding"][0].update(code="ankle swelling"),
    "a search for what to update": lambda e: e["request"].update(method="PUT", url="Observation?code=1"),
    "an address beside the urns": lambda e: (
        e.update(fullUrl="https://x.example/Observation/7"),
        e["resource"].update(id="7"),
    )[0],
    "an element with an id": lambda e: e["resource"]["code"].update(id="a"),
    "a component of another code": _component("78564009"),
    "a range in order": _range(1, 2),
    "a whole number": _value(valueInteger=7),
    "a vital sign": lambda e: e["resource"]["code"]["coding"][0].update(
        system="http://loinc.org", code="8867-4"
    ),
    "no reference to another entry": lambda e: e["resource"].update(subject={"reference": "Patient/1"}),
}
WRONG: dict[str, Change] = {
    "a code with two spaces": lambda e: e["resource"]["code"]["coding"][0].update(code="ankle  swelling"),
    "a code with a space at its end": lambda e: e["resource"]["code"]["coding"][0].update(code="ankle "),
    "another type in the request": lambda e: e["request"].update(url="Patient"),
    "a longer name in the request": lambda e: e["request"].update(
        method="PUT", url="ObservationDefinition?code=1"
    ),
    "an update of nothing named": lambda e: e["request"].update(method="PUT"),
    "a search to create": lambda e: e["request"].update(url="Observation?code=1"),
    "no absolute address": lambda e: e.update(fullUrl="7"),
    "the address of another": lambda e: e.update(fullUrl=URN.format(PLACE + 1)),
    "a reference to the wrong type": lambda e: e["resource"].update(
        encounter={"reference": URN.format(PATIENT)}
    ),
    "a subject of the wrong type": lambda e: e["resource"].update(subject={"reference": URN.format(1)}),
    "a component of the same code": _component(f"8499900{PLACE - 1}"),
    "a range out of order": _range(9, 1),
    "a whole number with a point": _value(valueInteger=7.0),
    "a number for a text": _value(valueString=7),
    "two values": lambda e: e["resource"].update(valueBoolean=True),
    "no status": lambda e: e["resource"].pop("status"),
    "a key that there is not": lambda e: e["resource"].update(colour="red"),
    "a control character": lambda e: e["resource"]["code"].update(text="\x07"),
}


@pytest.mark.parametrize("edition", EDITIONS)
@pytest.mark.parametrize("name", RIGHT)
def test_one_that_is_odd_but_right_does_not_hold_up_the_rest(edition: str, name: str) -> None:
    value = bundle()
    RIGHT[name](value["entry"][PLACE])
    known = registry(edition)
    found = fast.settle(value, known)
    errors = [i for i in thorough(read(value), known) if i.is_error]
    if name == "a vital sign":  # whose profile asks for what this Observation lacks
        assert found is None
        assert errors
    else:
        assert found == []
        assert errors == []


@pytest.mark.parametrize("edition", EDITIONS)
@pytest.mark.parametrize("name", WRONG)
def test_one_that_is_wrong_is_not_let_through(edition: str, name: str) -> None:
    value = bundle()
    WRONG[name](value["entry"][PLACE])
    assert [i for i in thorough(read(value), registry(edition)) if i.is_error]
    assert fast.settle(value, registry(edition)) is None


def test_more_kinds_of_entries_than_are_compiled_for_one_bundle_are_walked() -> None:
    value = bundle()
    known = registry("R4")
    urls = [f"https://x.example/StructureDefinition/p{n}" for n in range(40)]
    for n, url in enumerate(urls, len(value["entry"])):
        entry = deepcopy(value["entry"][1])
        entry["fullUrl"] = URN.format(n)
        entry["resource"]["meta"] = {"profile": [url]}
        value["entry"].append(entry)
    assert fast.settle(value, known) is None


@pytest.mark.parametrize("edition", EDITIONS)
@pytest.mark.parametrize(
    "url", ["urn:uuid:", "urn:uuid:1", "urn:uuid:a:b", "urn:uuid:A", "urn:oid:1.2.3", "x:"]
)
def test_both_passes_agree_on_names_that_are_no_uuid(edition: str, url: str) -> None:
    value = bundle()
    value["entry"][PLACE]["fullUrl"] = url
    settled(value, edition)
    for reference in ({"subject": {"reference": url}}, {"hasMember": [{"reference": url}]}):
        referring = deepcopy(value)
        referring["entry"][PLACE + 1]["resource"].update(reference)
        settled(referring, edition)
