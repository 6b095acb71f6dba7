"""The resources of a chart, whatever they come in: a Bundle, a CDS Hooks prefetch, a list, a single resource.

Sources: FHIR R4 Bundle; CDS Hooks 2.0 "Prefetch" (a key may be null, a Bundle, a resource or an
OperationOutcome of the client).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any, Final

from fhirgallop.chart.elements import Element, element, text
from fhirgallop.chart.log import Log

MAX_RESOURCES: Final = 200_000
MAX_NESTING: Final = 4
# A history holds versions that are no longer true; a message or a response header says nothing of a patient.
_REFUSED_BUNDLES: Final = frozenset({"history"})


@dataclass(frozen=True, slots=True)
class Found:
    """One resource of the chart.

    Attributes:
        type: resource type.
        resource: its content.
        place: where it stands, as an expression for issues.
        url: its full address where the Bundle gives one (`urn:uuid:...`, `https://server/Observation/1`).
        id: its logical id; empty when it has none that could be printed in one word.
        base: address of the server it lies on; empty when unknown.
    """

    type: str
    resource: Element
    place: str
    url: str
    id: str = field(init=False)
    base: str = field(init=False)

    def __post_init__(self) -> None:
        id_ = text(self.resource.get("id"))
        id_ = id_ if id_.isprintable() and " " not in id_ else ""
        tail = f"/{self.type}/{id_}"
        object.__setattr__(self, "id", id_)
        object.__setattr__(
            self, "base", self.url.removesuffix(tail) if id_ and self.url.endswith(tail) else ""
        )

    @property
    def name(self) -> str:
        """How a reader finds it: `Observation/123`, else its full address, else its place."""
        return f"{self.type}/{self.id}" if self.id else self.url or self.place


def gather(chart: Any, log: Log) -> list[Found]:
    """Every resource once, the newest version of each, in the order of the chart."""
    kept: dict[str, Found] = {}
    for count, found in enumerate(_walk(chart, "", "", 0, log)):
        if count >= MAX_RESOURCES:
            words = f"The chart holds more than {MAX_RESOURCES:,} resources; the rest was not read."
            log.add("error", "too-long", "chart-too-large", words)
            break
        key = found.url or (found.name if found.id else found.place)
        other = kept.get(key)
        if other is None or _updated(found) > _updated(other):
            kept[key] = found
    return list(kept.values())


def _updated(found: Found) -> str:
    return text(element(found.resource.get("meta")).get("lastUpdated"))


def _walk(value: Any, place: str, url: str, depth: int, log: Log) -> Iterator[Found]:
    if value is None:
        return
    if depth > MAX_NESTING:
        log.add(
            "error", "structure", "chart-too-deep", "Bundles lie inside each other too deep; not read.", place
        )
    elif isinstance(value, list):
        for index, item in enumerate(value):
            yield from _walk(item, f"{place}[{index}]", "", depth + 1, log)
    elif not isinstance(value, dict):
        log.add("error", "structure", "chart-shape", "Here stands no resource; send FHIR resources.", place)
    elif "resourceType" not in value:
        for key, item in value.items():
            named = text(key) if text(key).isidentifier() else "key"
            yield from _walk(item, f"{place}.{named}" if place else named, "", depth + 1, log)
    else:
        yield from _resource(value, place, url, depth, log)


def _resource(value: Element, place: str, url: str, depth: int, log: Log) -> Iterator[Found]:
    kind = text(value.get("resourceType"))
    place = place or kind
    if kind == "Bundle":
        yield from _bundle(value, place, depth, log)
    elif kind == "OperationOutcome":
        words = "The sender could not fetch this part of the chart; what it would say stays unknown."
        log.add("warning", "incomplete", "chart-part-missing", words, place)
    elif not kind:
        log.add("error", "structure", "chart-shape", "This resource names no type; it was not read.", place)
    else:
        yield Found(kind, value, place, url)


def _bundle(bundle: Element, place: str, depth: int, log: Log) -> Iterator[Found]:
    if text(bundle.get("type")) in _REFUSED_BUNDLES:
        words = "A history holds outdated versions; send a collection or the answer of a search."
        log.add("error", "not-supported", "chart-bundle-type", words, place)
        return
    links = bundle.get("link")
    for link in links if isinstance(links, list) else ():
        if element(link).get("relation") == "next":
            words = "The search has further pages that were not sent; what they would say stays unknown."
            log.add("warning", "incomplete", "chart-part-missing", words, place)
    entries = bundle.get("entry")
    if entries is not None and not isinstance(entries, list):
        log.add("error", "structure", "chart-shape", "Bundle.entry is no list; it was not read.", place)
        return
    for index, entry in enumerate(entries or ()):
        held = element(entry)
        if element(held.get("request")).get("method") == "DELETE" or held.get("resource") is None:
            continue
        inner = f"{place}.entry[{index}].resource"
        resource = held["resource"]
        if isinstance(resource, dict) and "resourceType" in resource:
            url = text(held.get("fullUrl"))
            yield from _walk(resource, inner, url if url.isprintable() else "", depth + 1, log)
        else:
            log.add(
                "error", "structure", "chart-shape", "Here stands no resource; send FHIR resources.", inner
            )
