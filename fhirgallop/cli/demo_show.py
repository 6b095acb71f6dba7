"""What the demonstration prints: the coded examination as a table, deliveries, cards."""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING, Any, Final

if TYPE_CHECKING:
    from rich.console import Console

_LOCAL: Final = "https://fernwood.example/heart-form"


def show_exam(console: Console, answer: dict[str, Any]) -> None:
    """One row a finding, then everything the service said of the record."""
    from rich.table import Table  # noqa: PLC0415 - heavy; --help stays quick

    table = Table(
        "field", "finding", "presence", "code", "value", title="One examination, coded", title_justify="left"
    )
    resources = [entry["resource"] for entry in answer["bundle"]["entry"]]
    for resource in resources:
        if resource["resourceType"] == "Observation" and "hasMember" not in resource:
            for part in _parts(resource):
                table.add_row(*part)
    console.print(table)
    console.print(f"{len(resources)} resources in one transaction Bundle.")
    for issue in answer["outcome"]["issue"]:
        console.print(f"{issue['severity']}: {issue['details']['text']}", markup=False)
    for name in answer["unread"]:
        console.print(f"not read: {name}", markup=False)
    review = answer["review"]
    for words in filter(None, (review.get("ask"), *review["notices"])):
        console.print(f"review: {words}", markup=False)


def show_delivery(console: Console, entries: list[dict[str, Any]]) -> None:
    """What the record system answered for each entry of the transaction, counted."""
    counts: dict[str, int] = {}
    for entry in entries:
        kind = entry["response"]["location"].partition("/")[0]
        counts[kind] = counts.get(kind, 0) + 1
    told = ", ".join(f"{number} {kind}" for kind, number in counts.items())
    console.print(f"Delivered to the record system, in one transaction: {told}.")
    console.print(f"The first of them stands there as {entries[0]['response']['location']}.", markup=False)


def show_cards(console: Console, cards: list[dict[str, Any]]) -> None:
    """Cards as a record system might show them."""
    for card in cards:
        console.print(f"\n[{card['indicator']}] {card['summary']}", style="bold", markup=False)
        console.print(card.get("detail", ""), markup=False, soft_wrap=True)
        for suggestion in card.get("suggestions", ()):
            console.print(f"  ( ) {suggestion['label']}", markup=False)
        reasons = " | ".join(reason["display"] for reason in card.get("overrideReasons", ()))
        if reasons:
            console.print(f"  or: {reasons}", markup=False)
    if not cards:
        console.print("No card; that is no reassurance.")


def _parts(resource: dict[str, Any]) -> Iterator[tuple[str, str, str, str, str]]:
    """Rows of one Observation: itself, or the parts of a panel."""
    field = next((c["code"] for c in resource["code"]["coding"] if c["system"] == _LOCAL), "")
    parts = resource.get("component", ())
    if not any(name.startswith("value") or name == "dataAbsentReason" for name in resource):
        yield field, resource["code"]["text"], "", _code(resource), ""
        for part in parts:
            yield "", f"  {part['code']['text']}", *_said(part)
        return
    described = "; ".join(f"{part['code']['text']}: {_value(part)}" for part in parts)
    presence, code, value = _said(resource)
    yield field, resource["code"]["text"], presence, code, "; ".join(filter(None, (value, described)))


def _said(part: dict[str, Any]) -> tuple[str, str, str]:
    concept = part.get("valueCodeableConcept", part.get("dataAbsentReason", {}))
    own = [c["code"] for c in concept.get("coding", ()) if c.get("code", "").startswith("presence:")]
    presence = own[0].removeprefix("presence:") if own else ""
    return presence, _code(part), "" if presence else _value(part)


def _code(part: dict[str, Any]) -> str:
    coding = part["code"]["coding"][0]
    names = {"http://snomed.info/sct": "SNOMED CT", "http://loinc.org": "LOINC",
             "http://human-phenotype-ontology.org": "HPO"}  # fmt: skip
    return f"{names.get(coding['system'], 'own')} {coding['code']}"


def _value(part: dict[str, Any]) -> str:
    if "valueQuantity" in part:
        quantity = part["valueQuantity"]
        return f"{quantity.get('comparator', '')}{quantity['value']} {quantity['unit']}"
    if "valueRange" in part:
        low, high = part["valueRange"]["low"], part["valueRange"]["high"]
        return f"{low['value']} to {high['value']} {high['unit']}"
    concept = part.get("valueCodeableConcept") or part.get("dataAbsentReason") or {}
    return str(concept.get("text", part.get("valueString", "")))
