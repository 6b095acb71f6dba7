"""Read, vread, history and search as answers, for what the caller may see.

Source: FHIR R4 http.html, "read", "vread", "history", "search".
"""

from __future__ import annotations

import base64
import binascii
from collections.abc import Sequence
from typing import Any, Final

import msgspec
from fastapi import Request
from starlette.responses import Response

from fhirgallop.codes import fhirjson
from fhirgallop.outcome import has_errors
from fhirgallop.service import audit
from fhirgallop.service.answers import RefusalError, refusal
from fhirgallop.service.auth.caller import Caller
from fhirgallop.service.fhir import body, dates
from fhirgallop.service.fhir.address import Base, is_id, not_found, version_number
from fhirgallop.service.fhir.conditions import etag, unchanged, version_headers
from fhirgallop.service.fhir.negotiation import GENERAL, Wish
from fhirgallop.service.fhir.query import CURSOR, MOST_COUNT, parse
from fhirgallop.service.fhir.search import entry, page_address, parsed, run, searchset
from fhirgallop.service.fhir.writing import Desk
from fhirgallop.storage.resource_search import Kept

HISTORY_PARAMETERS: Final = (*GENERAL, "_count", "_since", CURSOR)


def desk(request: Request) -> Desk:
    """The keeper of the resources."""
    found: Desk = request.app.state.fhir
    return found


def seen(request: Request, kept: Kept | None, does: str = "r") -> Kept:
    """`kept`, or 404 where there is none or the caller may not see it."""
    caller: Caller = request.state.caller
    if kept is None:
        raise not_found()
    reach = caller.reach(kept.type, does)
    if not reach.everything and not reach.admits(parsed(kept)):
        raise not_found()
    return kept


def read(request: Request, wish: Wish, base: Base, type_: str, fhir_id: str) -> Response:
    """The current version of a resource."""
    found = desk(request).store.read(base.edition, type_, fhir_id) if is_id(fhir_id) else None
    kept = seen(request, found)
    audit.about(
        request, action="R", interaction="read", patients=[kept.patient], entities=[f"{type_}/{fhir_id}"]
    )
    return _one(request, wish, kept)


def vread(request: Request, wish: Wish, base: Base, type_: str, fhir_id: str, version: str) -> Response:
    """One version of a resource."""
    number = version_number(version)
    known = is_id(fhir_id) and number is not None
    kept = seen(
        request, desk(request).store.version(base.edition, type_, fhir_id, number or 0) if known else None
    )
    address = f"{type_}/{fhir_id}/_history/{version}"
    audit.about(request, action="R", interaction="vread", patients=[kept.patient], entities=[address])
    return _one(request, wish, kept)


def history(request: Request, wish: Wish, base: Base, type_: str, fhir_id: str) -> Response:
    """The versions of a resource, newest first."""
    store = desk(request).store
    newest = seen(request, store.read(base.edition, type_, fhir_id) if is_id(fhir_id) else None)
    given = request.query_params
    count = _count(given.get("_count", "50"))
    since = _since(given.get("_since"))
    below = _below(given.get(CURSOR))
    found = store.history(base.edition, type_, fhir_id, below=below, limit=count + 1)
    reach = request.state.caller.reach(type_, "r")
    page = [kept for kept in found[:count] if reach.everything or reach.admits(parsed(kept))]
    page = [kept for kept in page if since is None or kept.updated >= since]
    home = f"{base.of(type_, fhir_id)}/_history"
    asked = [(name, given[name]) for name in ("_count", "_since") if name in given]
    links = [{"relation": "self", "url": page_address(home, asked, given.get(CURSOR, ""))}]
    if len(found) > count and (since is None or found[count - 1].updated >= since):
        cursor = base64.urlsafe_b64encode(str(found[count - 1].version).encode()).decode().rstrip("=")
        links.append({"relation": "next", "url": page_address(home, asked, cursor)})
    bundle: dict[str, Any] = {"resourceType": "Bundle", "type": "history"}
    if since is None and reach.everything and below is None and len(found) <= count:
        bundle["total"] = len(found)  # the oldest versions may have been kept long enough
    bundle["link"] = links
    if page:
        bundle["entry"] = [_version_entry(kept, base) for kept in page]
    audit.about(request, action="R", interaction="history-instance", patients=[newest.patient],
                entities=[f"{type_}/{fhir_id}"])  # fmt: skip
    return answer(wish, fhirjson.write(bundle))


def search(
    request: Request, wish: Wish, base: Base, type_: str, parameters: Sequence[tuple[str, str]]
) -> Response:
    """One page of the resources of a type that fit."""
    keeper = desk(request)
    query = parse(base.edition, type_, parameters, strict=wish.strict, now=keeper.clock())
    if has_errors(query.issues):
        raise RefusalError(400, [issue for issue in query.issues if issue.severity != "information"])
    reach = request.state.caller.reach(type_, "s")
    found = run(keeper.store, query, None if reach.everything else reach.admits)
    asked = [digest for some in query.wanted.patients for digest in some]
    audit.about(
        request, action="E", interaction="search-type",
        patients=[kept.patient for kept in found.resources] or asked,
        entities=[f"{type_}/{kept.fhir_id}" for kept in found.resources],
    )  # fmt: skip
    return answer(wish, searchset(found, query, base))


def answer(wish: Wish, text: bytes, status: int = 200, headers: dict[str, str] | None = None) -> Response:
    """JSON bytes as they were asked for."""
    if wish.pretty and text:
        text = msgspec.json.format(text, indent=2)
    return Response(text, status, headers=headers, media_type=wish.media_type)


def _one(request: Request, wish: Wish, kept: Kept) -> Response:
    headers = version_headers(kept.version, kept.updated)
    if unchanged(request, headers["ETag"], kept.updated):
        return Response(status_code=304, headers=headers)
    text = body.given(kept.type, kept.fhir_id, kept.version, kept.updated, kept.body)
    return answer(wish, text, headers=headers)


def _version_entry(kept: Kept, base: Base) -> dict[str, Any]:
    first = kept.version == 1
    url = kept.type if first else f"{kept.type}/{kept.fhir_id}"
    return {
        **entry(kept, base),
        "request": {"method": "POST" if first else "PUT", "url": url},
        "response": {
            "status": "201 Created" if first else "200 OK",
            "etag": etag(kept.version),
            "lastModified": dates.instant(kept.updated),
        },
    }


def _count(text: str) -> int:
    if not (text.isascii() and text.isdigit() and 0 < len(text) < 10 and int(text)):
        raise refusal(400, "value", "search-control", "_count is a whole number from 1.")
    return min(int(text), MOST_COUNT)


def _since(text: str | None) -> int | None:
    if text is None:
        return None
    meant = dates.interval(text.replace(" ", "+"))
    if meant is None:
        raise refusal(400, "value", "search-date", "_since is an instant such as 2026-03-14T10:00:00Z.")
    return meant[0]


def _below(text: str | None) -> int | None:
    if text is None:
        return None
    try:
        number = version_number(base64.urlsafe_b64decode(text[:40] + "=" * (-len(text) % 4)).decode("ascii"))
    except (ValueError, binascii.Error):
        number = None
    if number is None:
        said = "The address of this page is damaged; start the history again."
        raise refusal(400, "value", "search-cursor", said)
    return number
