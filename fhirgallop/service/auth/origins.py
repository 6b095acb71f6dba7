"""Pages of other sites: which may call from a browser, and how the others are kept out.

Sources: Fetch Standard ("CORS protocol"), Fetch Metadata (`Sec-Fetch-*`); CDS Hooks 2.0.1, "Cross-Origin
Resource Sharing". Only origins that are listed one by one may read answers, and never with cookies.
"""

from __future__ import annotations

from typing import Final
from urllib.parse import urlsplit

from starlette.requests import Request
from starlette.responses import Response

from fhirgallop.outcome import Issue
from fhirgallop.service import answers
from fhirgallop.settings import Settings

_METHODS: Final = "GET, HEAD, POST, PUT, PATCH, DELETE"
_SENT: Final = (
    "Authorization, Content-Type, Accept, Idempotency-Key, If-Match, If-None-Exist, If-None-Match, Prefer, "
    "X-Request-Id"
)
_READ: Final = (
    "Content-Location, ETag, Fhirgallop-Issues, Last-Modified, Location, Retry-After, WWW-Authenticate, "
    "X-Request-Id"
)
# RFC 6797: a browser that was here once never comes without TLS again
_TLS_ONLY: Final = (b"strict-transport-security", b"max-age=31536000")


def refusal(request: Request) -> Response | None:
    """The answer to a request that goes no further: foreign pages and names are refused, preflights answered.

    A browser that was led here by a foreign page, or by a foreign name that points to this machine, gets in
    only by an ordinary link.
    """
    settings: Settings = request.app.state.settings
    host = request.headers.get("host", "")
    if _name(f"//{host}") not in settings.names:
        text = "The service is not known by this name; call it by one of those in its settings."
        return answers.outcome_answer(421, [Issue("error", "forbidden", "http-host", text)])
    origin = request.headers.get("origin")
    if origin in settings.cors_origins:
        asked = request.method == "OPTIONS" and "access-control-request-method" in request.headers
        return _preflight() if asked else None
    foreign = origin is not None and origin.partition("://")[2] != host
    if foreign or (
        request.headers.get("sec-fetch-site") in ("cross-site", "same-site") and not _link(request)
    ):
        text = "Pages of other sites may not use this service; its settings list those that may."
        return answers.outcome_answer(403, [Issue("error", "forbidden", "http-origin", text)])
    return None


def headers(request: Request) -> list[tuple[bytes, bytes]]:
    """What every answer says to the page that asked, errors too."""
    settings: Settings = request.app.state.settings
    found = [_TLS_ONLY] if settings.certificate or settings.behind_proxy else []
    if not settings.cors_origins:
        return found
    found.append((b"vary", b"Origin"))
    origin = request.headers.get("origin")
    if origin in settings.cors_origins and origin:
        found.append((b"access-control-allow-origin", origin.encode("ascii")))
        found.append((b"access-control-expose-headers", _READ.encode("ascii")))
    return found


def _link(request: Request) -> bool:
    """Whether somebody followed a link, or comes back from signing in: a page that no other one reads."""
    asked = (request.headers.get("sec-fetch-mode"), request.headers.get("sec-fetch-dest"))
    return request.method == "GET" and asked == ("navigate", "document")


def _preflight() -> Response:
    allowed = {
        "Access-Control-Allow-Methods": _METHODS,
        "Access-Control-Allow-Headers": _SENT,
        "Access-Control-Max-Age": "600",
    }
    return Response(status_code=204, headers=allowed)


def _name(address: str) -> str | None:
    try:
        return urlsplit(address).hostname
    except ValueError:
        return None
