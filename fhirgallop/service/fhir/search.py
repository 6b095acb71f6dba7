"""Runs a search page by page, and writes the searchset.

A page goes on where the last one stopped (its cursor names a place in the order), so pages stay whole while
resources are added. What the database cannot decide is looked at in each resource, and a page looks at no
more than a bounded number: it may be short, or empty, and have a next one.
"""

from __future__ import annotations

import base64
import binascii
import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final
from urllib.parse import urlencode

import msgspec

from fhirgallop.codes import fhirjson
from fhirgallop.outcome import Issue, operation_outcome
from fhirgallop.service.answers import refusal
from fhirgallop.service.fhir import body
from fhirgallop.service.fhir.address import Base
from fhirgallop.service.fhir.query import CURSOR, Query
from fhirgallop.storage.resource_search import Kept, Place, Resources

MOST_LOOKED_AT: Final = 2000  # resources that one page looks at
MOST_COUNTED: Final = 20_000  # resources that are looked at for a total
_SLICE: Final = 250
_PLACE: Final = re.compile(r"(changed|-changed|date|-date) (-?\d{1,19}) (\d{1,18})", re.ASCII)
_decoder: Final = msgspec.json.Decoder()


@dataclass(frozen=True, slots=True)
class Found:
    """One page."""

    resources: tuple[Kept, ...]
    total: int | None
    following: Place | None


def run(store: Resources, query: Query, admits: Callable[[Mapping[str, Any]], bool] | None) -> Found:
    """One page of what is looked for.

    Args:
        store: where it is looked for.
        query: without errors.
        admits: whether the caller may see a resource; None where all may be seen.
    """
    checks = [*query.checks, admits] if admits else query.checks
    total = _total(store, query, checks)
    after = _place(query)
    found: list[Kept] = []
    looked = 0
    size = _SLICE if checks else query.count + 1
    while query.count and looked < MOST_LOOKED_AT:
        some = store.find(query.wanted, order=query.order, after=after, limit=size)
        for kept in some:
            if len(found) == query.count:
                return Found(tuple(found), total, after)
            after = kept.place(query.order)
            looked += 1
            if _fits(kept, checks):
                found.append(kept)
        if len(some) < size:
            return Found(tuple(found), total, None)
    return Found(tuple(found), total, after if query.count else None)


def matches(store: Resources, query: Query) -> list[Kept]:
    """The resources that are looked for, two at most, for conditions that allow one match only.

    Raises:
        RefusalError: 412 where too many would have to be looked at.
    """
    found: list[Kept] = []
    after: Place | None = None
    for _ in range(MOST_LOOKED_AT // _SLICE):
        some = store.find(query.wanted, order="changed", after=after, limit=_SLICE)
        found += [kept for kept in some if _fits(kept, query.checks)]
        if len(found) > 1 or len(some) < _SLICE:
            return found[:2]
        after = some[-1].place("changed")
    text = "The condition leaves too much open to be worked out; name an identifier."
    raise refusal(412, "too-costly", "condition-too-open", text)


def searchset(found: Found, query: Query, base: Base) -> bytes:
    """The Bundle of one page."""
    type_ = query.wanted.type
    home = f"{base.url}/{type_}"
    links = [{"relation": "self", "url": page_address(home, query.applied, query.cursor)}]
    if found.following:
        links.append({"relation": "next", "url": page_address(home, query.applied, _cursor(query, found))})
    entries: list[dict[str, Any]] = [entry(kept, base, {"mode": "match"}) for kept in found.resources]
    issues = _told(query, found)
    if issues:
        entries.append({"resource": operation_outcome(issues), "search": {"mode": "outcome"}})
    bundle: dict[str, Any] = {"resourceType": "Bundle", "type": "searchset"}
    if found.total is not None:
        bundle["total"] = found.total
    bundle["link"] = links
    if entries:
        bundle["entry"] = entries
    return fhirjson.write(bundle)


def entry(kept: Kept, base: Base, search: Mapping[str, str] | None = None) -> dict[str, Any]:
    """A kept resource as an entry of a Bundle."""
    text = body.given(kept.type, kept.fhir_id, kept.version, kept.updated, kept.body)
    made: dict[str, Any] = {"fullUrl": base.of(kept.type, kept.fhir_id), "resource": msgspec.Raw(text)}
    return {**made, "search": search} if search else made


def parsed(kept: Kept) -> Mapping[str, Any]:
    """The resource for a look at its codes; its numbers are not exact."""
    value: Mapping[str, Any] = _decoder.decode(kept.body)
    return value


def _fits(kept: Kept, checks: Sequence[Callable[[Mapping[str, Any]], bool]]) -> bool:
    if not checks:
        return True
    resource = parsed(kept)
    return all(check(resource) for check in checks)


def _total(
    store: Resources, query: Query, checks: Sequence[Callable[[Mapping[str, Any]], bool]]
) -> int | None:
    """How many there are; None where that is not asked for, or would take too long to say."""
    asked = query.total == "accurate" or not query.count
    if query.total == "none" and query.count:
        return None
    if not checks:
        wanted = query.wanted
        narrow = wanted.ids or wanted.names or wanted.patients or wanted.encounters
        return store.count(wanted) if asked or narrow else None
    if not asked:
        return None
    total = looked = 0
    after: Place | None = None
    while looked < MOST_COUNTED:
        some = store.find(query.wanted, order="changed", after=after, limit=_SLICE)
        total += sum(_fits(kept, checks) for kept in some)
        looked += len(some)
        if len(some) < _SLICE:
            return total
        after = some[-1].place("changed")
    return None


def _told(query: Query, found: Found) -> list[Issue]:
    issues = list(query.issues)
    if found.total is None and (query.total == "accurate" or not query.count):
        text = "The total would take too long to work out; ask for less, for one patient perhaps."
        issues.append(Issue("warning", "too-costly", "search-total", text))
    if found.resources:
        # a hint how to ask otherwise is for those who found nothing
        issues = [issue for issue in issues if issue.severity != "information"]
    return issues


def page_address(home: str, applied: Sequence[tuple[str, str]], cursor: str) -> str:
    """The address of a page: what was asked for, and where it starts."""
    parameters = [*applied, (CURSOR, cursor)] if cursor else list(applied)
    return f"{home}?{urlencode(parameters)}" if parameters else home


def _cursor(query: Query, found: Found) -> str:
    assert found.following is not None  # noqa: S101 - the caller looked
    place = f"{query.order} {found.following.value} {found.following.number}"
    return base64.urlsafe_b64encode(place.encode()).decode().rstrip("=")


def _place(query: Query) -> Place | None:
    if not query.cursor:
        return None
    try:
        text = base64.urlsafe_b64decode(query.cursor[:200] + "=" * (-len(query.cursor) % 4)).decode("ascii")
    except (ValueError, binascii.Error):
        text = ""
    read = _PLACE.fullmatch(text)
    if read is None or read[1] != query.order:
        said = "The address of this page is damaged; start the search again."
        raise refusal(400, "value", "search-cursor", said)
    return Place(int(read[2]), int(read[3]))
