"""What stands around every request: who may ask, safe headers, answers to what breaks, a log without data."""

from __future__ import annotations

import hashlib
import logging
import re
import time
from collections.abc import Callable
from typing import Any, Final

import structlog
from starlette.requests import Request
from starlette.responses import Response
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from fhirgallop.outcome import Issue
from fhirgallop.service import answers
from fhirgallop.service.audit import Auditor
from fhirgallop.service.auth import origins
from fhirgallop.service.auth.caller import Caller
from fhirgallop.service.limits import Limits
from fhirgallop.service.logging import place
from fhirgallop.service.metrics import Metrics
from fhirgallop.storage.submissions import StorageError

log: Final = logging.getLogger("fhirgallop.service")

STORAGE_FAILED: Final = Issue(
    "fatal", "transient", "storage-failed",
    "The database does not answer; nothing of this request was kept. Send it again later.",
)  # fmt: skip
AUDIT_FAILED: Final = Issue(
    "fatal", "transient", "audit-failed",
    "That this was asked could not be written to the audit trail, so it is not answered; ask again later.",
)  # fmt: skip
REQUEST_ID: Final = b"x-request-id"
# a UUID and nothing freer: what a sender writes there stands in log and audit trail, and a patient's number
# must not
_WELL_FORMED: Final = re.compile(r"[0-9a-fA-F]{8}(?:-?[0-9a-fA-F]{4}){3}-?[0-9a-fA-F]{12}")
_BODY: Final = frozenset({b"content-length", b"transfer-encoding"})
_METHODS: Final = frozenset({"GET", "HEAD", "POST", "PUT", "PATCH", "DELETE", "OPTIONS"})
_WATCHING: Final = frozenset({"/health", "/ready", "/metrics"})
_SAFE: Final = [(name.lower().encode(), value.encode()) for name, value in answers.SAFE_HEADERS.items()]


class Guard:
    """ASGI middleware: lets a request through or not, and sees every answer before it leaves."""

    def __init__(self, app: ASGIApp, *, new_id: Callable[[], str]) -> None:
        self._app = app
        self._new_id = new_id

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """One request, or something else of the server's that passes untouched."""
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return
        if scope["method"] == "HEAD":
            # what GET answers, without its content (RFC 9110, 9.3.2), which the server leaves out
            scope = {**scope, "method": "GET"}
        visit = _Visit(Request(scope, receive), send, self._new_id)
        limits: Limits = scope["app"].state.limits
        with (
            structlog.contextvars.bound_contextvars(request=visit.id),
            limits.counted(_address(visit.request)),
        ):
            try:
                await self._answer(visit)
            finally:
                visit.end()

    async def _answer(self, visit: _Visit) -> None:
        request = visit.request
        refused = origins.refusal(request) or _too_much(request)
        if refused is not None:
            await visit.say(refused)
            return
        try:
            await self._app(request.scope, visit.receive, visit.send)
        except Exception as error:  # noqa: BLE001 - the last line of defence: an answer, and no data in the log
            answer = _broken(error)
            if visit.status:
                # half an answer is out: only a connection that ends says that it is not whole
                raise CutOffError from None
            await visit.say(answer)


class CutOffError(Exception):
    """An answer broke off after it had begun; what broke stands in the log."""


class _Visit:
    """One request on its way: its id, its clock, and what is done before its answer leaves."""

    def __init__(self, request: Request, send: Send, new_id: Callable[[], str]) -> None:
        self.request = request
        self.status = 0
        self._send = send
        self._start = time.perf_counter()
        self._withheld = False
        self._unread = any(name in _BODY and value != b"0" for name, value in request.scope["headers"])
        given = next((value for name, value in request.scope["headers"] if name == REQUEST_ID), b"")
        text = given.decode("latin-1")
        self.id = text if _WELL_FORMED.fullmatch(text) else new_id()
        request.state.request_id = self.id

    async def say(self, answer: Response) -> None:
        """Sends an answer of the guard's own."""
        await answer(self.request.scope, self.request.receive, self.send)

    async def receive(self) -> Message:
        """The next part of the request."""
        message = await self.request.receive()
        if message["type"] != "http.request" or not message.get("more_body"):
            self._unread = False
        return message

    async def send(self, message: Message) -> None:
        """Passes a part of the answer on; nothing of it when its audit event could not be kept."""
        if self._withheld:
            return
        if message["type"] == "http.response.start":
            auditor: Auditor = self.request.app.state.audit
            if not await auditor.answered(self.request, message["status"]) and message["status"] < 400:
                refused = answers.outcome_answer(503, [AUDIT_FAILED], {"Retry-After": "30"})
                await refused(self.request.scope, self.request.receive, self._pass_on)
                self._withheld = True
                return
        await self._pass_on(message)

    async def _pass_on(self, message: Message) -> None:
        if message["type"] == "http.response.start":
            self.status = message["status"]
            headers = message["headers"] = list(message.get("headers", ()))
            there = {name.lower() for name, _ in headers}
            headers += [pair for pair in _SAFE if pair[0] not in there]
            headers += origins.headers(self.request)
            headers.append((REQUEST_ID, self.id.encode()))
            if self._unread:
                # what is still to come of the request is not wanted: the server hangs up
                headers.append((b"connection", b"close"))
        await self._send(message)

    def end(self) -> None:
        """Counts the request, and leaves one line in the log.

        The route's pattern stands there, never the address, where a client may write a patient's number.
        """
        route = getattr(self.request.scope.get("route"), "path", "(none)")
        method = self.request.method if self.request.method in _METHODS else "(other)"
        took = time.perf_counter() - self._start
        metrics: Metrics = self.request.app.state.metrics
        metrics.answered(method, route, self.status, took)
        caller: Caller | None = getattr(self.request.state, "caller", None)
        said: dict[str, Any] = {"status": self.status, "ms": round(took * 1000, 1)}
        if caller:
            said["caller"] = caller.kind
            if caller.name:
                said["who"] = hashlib.sha256(caller.name.encode("utf-8", "replace")).hexdigest()[:12]
        log.info("%s %s", method, route, extra=said)


def _address(request: Request) -> str:
    return request.client.host if request.client else ""


def _too_much(request: Request) -> Response | None:
    """A refusal where a client, or all together, ask too much; who only looks after the service is let in."""
    if request.url.path in _WATCHING:
        return None
    limits: Limits = request.app.state.limits
    refused = limits.refusal(_address(request))
    return answers.outcome_answer(refused.status, refused.issues, refused.headers) if refused else None


def _broken(error: Exception) -> Response:
    """The answer to what broke; the log gets its kind and place, no traceback: its text may hold data."""
    if isinstance(error, StorageError):
        log.error("storage failed: %s", error)
        return answers.outcome_answer(503, [STORAGE_FAILED], {"Retry-After": "30"})
    log.error("unexpected %s at %s", type(error).__name__, place(error))
    text = "Something broke here; nothing of the request was kept. Tell the operator the time of day."
    return answers.outcome_answer(500, [Issue("fatal", "exception", "service-broke", text)])
