"""If-Match, If-None-Match and their kin, and the headers that say which version an answer is.

Source: FHIR R4 http.html, "Managing Resource Contention", "conditional read"; RFC 9110, 8.8 and 13.
"""

from __future__ import annotations

import re
from email.utils import parsedate_to_datetime
from typing import Final

from starlette.requests import Request

from fhirgallop.service.answers import refusal
from fhirgallop.service.fhir.dates import http_date, ms

_WEAK: Final = re.compile(r'(?:W/)?"([^"]{1,64})"', re.ASCII)


def etag(version: int | str) -> str:
    """The ETag of a version."""
    return f'W/"{version}"'


def version_headers(version: int, updated: int) -> dict[str, str]:
    """What an answer with one version says of it."""
    return {"ETag": etag(version), "Last-Modified": http_date(updated)}


def expected_version(header: str | None) -> str | None:
    """The version that If-Match names; None without the header.

    Raises:
        RefusalError: 400 where it names no one version.
    """
    if header is None:
        return None
    found = _WEAK.fullmatch(header.strip())
    if found is None:
        text = 'If-Match names one version, as W/"3"; take it from the ETag of the last answer.'
        raise refusal(400, "value", "http-if-match", text)
    return found[1]


def stale() -> Exception:
    """412: the resource is another than the client saw."""
    text = "The resource has changed since; read it again, and make your change to what it is now."
    return refusal(412, "conflict", "http-version-conflict", text)


def unchanged(request: Request, tag: str, updated: int | None = None) -> bool:
    """Whether the client has this already (304)."""
    header = request.headers.get("if-none-match")
    if header is not None:
        plain = tag.removeprefix("W/")
        return any(one.strip().removeprefix("W/") in (plain, "*") for one in header.split(","))
    since = request.headers.get("if-modified-since")
    if since is None or updated is None:
        return False
    try:
        moment = parsedate_to_datetime(since)
        # the header knows seconds only
        return moment.tzinfo is not None and updated // 1000 <= ms(moment) // 1000
    except (ValueError, TypeError, OverflowError):
        return False
