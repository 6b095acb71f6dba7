"""Read and search of definitions: code systems, value sets, concept maps, profiles.

Source: FHIR R4 http.html and search.html; the search parameters that all definitions have in common.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any, Final
from urllib.parse import urlencode

import msgspec
from starlette.requests import Request
from starlette.responses import Response

from fhirgallop.codes import fhirjson
from fhirgallop.outcome import Issue, operation_outcome
from fhirgallop.service.answers import RefusalError, refusal
from fhirgallop.service.fhir.address import Base, not_found
from fhirgallop.service.fhir.conditions import etag, unchanged
from fhirgallop.service.fhir.interactions import answer
from fhirgallop.service.fhir.negotiation import GENERAL, Wish
from fhirgallop.service.fhir.published import Artefact, Library
from fhirgallop.service.fhir.query import DEFAULT_COUNT, MOST_COUNT

# Search parameters, with their types.
OFFERED: Final = {"_id": "token", "name": "string", "status": "token", "title": "string", "url": "uri",
                  "version": "token"}  # fmt: skip
_FROM: Final = "_from"  # number of the first definition of a page


def library(request: Request) -> Library:
    """The definitions that are known here."""
    found: Library = request.app.state.library
    return found


def read(request: Request, wish: Wish, base: Base, type_: str, fhir_id: str) -> Response:
    """One definition."""
    found = library(request).read(base.edition, type_, fhir_id)
    if found is None:
        raise not_found()
    headers = {"ETag": etag(found.tag)}
    if unchanged(request, headers["ETag"]):
        return Response(status_code=304, headers=headers)
    return answer(wish, found.text, headers=headers)


def search(
    request: Request, wish: Wish, base: Base, type_: str, parameters: Iterable[tuple[str, str]]
) -> Response:
    """One page of the definitions of a type; old versions of template maps stand last."""
    found = library(request).all(base.edition, type_)
    applied: list[tuple[str, str]] = []
    issues: list[Issue] = []
    count, start = DEFAULT_COUNT, 0
    for name, value in parameters:
        if name in GENERAL:
            continue
        if name in ("_count", _FROM):
            number = _number(name, value)
            count, start = (min(number, MOST_COUNT), start) if name == "_count" else (count, number)
            applied += [(name, value)] if name == "_count" else []
        elif name in OFFERED and value:
            wanted = value.split(",")
            found = [one for one in found if _fits(one, name, wanted)]
            applied.append((name, value))
        else:
            text = f"A parameter has no meaning here and was left out; searched by are {', '.join(OFFERED)}."
            issues.append(Issue("error" if wish.strict else "warning", "not-supported",
                                "search-unknown-parameter", text))  # fmt: skip
    if wish.strict and issues:
        raise RefusalError(400, issues)
    return answer(wish, fhirjson.write(_page(base, type_, found, applied, issues, (start, count))))


def _page(
    base: Base,
    type_: str,
    found: Sequence[Artefact],
    applied: Sequence[tuple[str, str]],
    issues: Sequence[Issue],
    page: tuple[int, int],
) -> dict[str, Any]:
    start, count = page
    home = f"{base.url}/{type_}"
    links = [
        {"relation": "self", "url": _address(home, [*applied, *([(_FROM, str(start))] if start else [])])}
    ]
    if count and start + count < len(found):
        links.append({"relation": "next", "url": _address(home, [*applied, (_FROM, str(start + count))])})
    entries: list[dict[str, Any]] = [
        {"fullUrl": base.of(type_, one.resource["id"]), "resource": msgspec.Raw(one.text),
         "search": {"mode": "match"}}
        for one in found[start : start + count]
    ]  # fmt: skip
    if issues:
        entries.append({"resource": operation_outcome(issues), "search": {"mode": "outcome"}})
    bundle = {"resourceType": "Bundle", "type": "searchset", "total": len(found), "link": links}
    return {**bundle, "entry": entries} if entries else bundle


def _fits(one: Artefact, name: str, wanted: Sequence[str]) -> bool:
    held = one.resource.get("id" if name == "_id" else name, "")
    if OFFERED[name] == "string":
        return any(str(held).casefold().startswith(value.casefold()) for value in wanted)
    return held in wanted


def _number(name: str, value: str) -> int:
    if not (value.isascii() and value.isdigit() and len(value) < 10):
        raise refusal(400, "value", "search-control", f"{name} is a whole number.")
    return int(value)


def _address(home: str, parameters: Sequence[tuple[str, str]]) -> str:
    return f"{home}?{urlencode(parameters)}" if parameters else home
