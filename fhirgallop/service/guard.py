"""What stands around every request: who may ask, safe headers, answers to what breaks, a log without data."""

from __future__ import annotations

import logging
import re
import time
from collections.abc import Callable
from typing import Final
from urllib.parse import urlsplit

import structlog
from starlette.requests import Request
from starlette.responses import Response
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from fhirgallop.outcome import Issue
from fhirgallop.service import answers
from fhirgallop.storage.submissions import StorageError

log: Final = logging.getLogger("fhirgallop.service")

STORAGE_FAILED: Final = Issue(
    "fatal", "transient", "storage-failed",
    "The examination could not be stored, and nothing of it was kept; send it again later.",
)  # fmt: skip
REQUEST_ID: Final = b"x-request-id"
# a UUID and nothing freer: what a sender writes there stands in log and audit trail, and a patient's number
# must not
_WELL_FORMED: Final = re.compile(r"[0-9a-fA-F]{8}(?:-?[0-9a-fA-F]{4}){3}-?[0-9a-fA-F]{12}")
_METHODS: Final = frozenset({"GET", "HEAD", "POST", "PUT", "PATCH", "DELETE", "OPTIONS"})
_SAFE: Final = [(name.lower().encode(), value.encode()) for name, value in answers.SAFE_HEADERS.items()]


class Guard:
    """ASGI middleware: lets a request through or not, whatever comes back has safe headers and a log line."""

    def __init__(self, app: ASGIApp, *, new_id: Callable[[], str]) -> None:
        self._app = app
        self._new_id = new_id

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """One request, or something else of the server's that passes untouched."""
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return
        visit = _Visit(scope, send, self._new_id)
        structlog.contextvars.bind_contextvars(request=visit.id)
        try:
            await self._answer(Request(scope, receive), visit)
        finally:
            structlog.contextvars.unbind_contextvars("request")
            visit.log()

    async def _answer(self, request: Request, visit: _Visit) -> None:
        refused = _misled(request)
        if refused is not None:
            await refused(request.scope, request.receive, visit.send)
            return
        try:
            await self._app(request.scope, request.receive, visit.send)
        except Exception as error:  # noqa: BLE001 - the last line of defence: an answer, and no data in the log
            answer = _broken(error)
            if visit.status:
                # half an answer is out: only a connection that ends says that it is not whole
                raise CutOffError from None
            await answer(request.scope, request.receive, visit.send)


class CutOffError(Exception):
    """An answer broke off after it had begun; what broke stands in the log."""


class _Visit:
    """One request on its way: its id, its clock, and what is put on the head of its answer."""

    def __init__(self, scope: Scope, send: Send, new_id: Callable[[], str]) -> None:
        self._scope = scope
        self._send = send
        self._start = time.perf_counter()
        self.status = 0
        given = next((value for name, value in scope["headers"] if name == REQUEST_ID), b"").decode("latin-1")
        self.id = given if _WELL_FORMED.fullmatch(given) else new_id()
        scope.setdefault("state", {})["request_id"] = self.id

    async def send(self, message: Message) -> None:
        """Passes a part of the answer on."""
        if message["type"] == "http.response.start":
            self.status = message["status"]
            headers = message["headers"] = list(message.get("headers", ()))
            there = {name.lower() for name, _ in headers}
            headers += [pair for pair in _SAFE if pair[0] not in there]
            headers.append((REQUEST_ID, self.id.encode()))
        await self._send(message)

    def log(self) -> None:
        """One line: the route's pattern, never the address, where a client may write a patient's number."""
        route = getattr(self._scope.get("route"), "path", "(none)")
        method = self._scope["method"] if self._scope["method"] in _METHODS else "(other)"
        took = (time.perf_counter() - self._start) * 1000
        said = {"request": self.id, "status": self.status, "ms": round(took, 1)}
        log.info("%s %s", method, route, extra=said)


def _misled(request: Request) -> Response | None:
    """A refusal where a page of another site speaks through somebody's browser.

    There is no sign-in yet, so that every program of this machine may ask; a browser that was led here by a
    foreign page, or by a foreign name that points to this machine, may not.
    """
    host = request.headers.get("host", "")
    if _name(f"//{host}") not in request.app.state.settings.names:
        text = "The service is not known by this name; call it by one of those in its settings."
        return answers.outcome_answer(421, [Issue("error", "forbidden", "http-host", text)])
    origin = request.headers.get("origin")
    foreign = origin is not None and origin.partition("://")[2] != host
    if foreign or request.headers.get("sec-fetch-site") in ("cross-site", "same-site"):
        text = "Pages of other sites may not use this service."
        return answers.outcome_answer(403, [Issue("error", "forbidden", "http-origin", text)])
    return None


def _name(address: str) -> str | None:
    try:
        return urlsplit(address).hostname
    except ValueError:
        return None


def _broken(error: Exception) -> Response:
    """The answer to what broke; the log gets its kind and place, no traceback: its text may hold data."""
    if isinstance(error, StorageError):
        log.error("storage failed: %s", error)
        return answers.outcome_answer(503, [STORAGE_FAILED], {"Retry-After": "30"})
    log.error("unexpected %s at %s", type(error).__name__, _place(error))
    text = "Something broke here; nothing of the request was kept. Tell the operator the time of day."
    return answers.outcome_answer(500, [Issue("fatal", "exception", "service-broke", text)])


def _place(error: BaseException) -> str:
    trace = error.__traceback__
    while trace and trace.tb_next:
        trace = trace.tb_next
    return f"{trace.tb_frame.f_code.co_filename}:{trace.tb_lineno}" if trace else "(nowhere)"
