"""The HTTP server around the application: patience with slow clients, and an end in good order.

Told to end (SIGTERM, Ctrl-C), it says so at `/ready`, takes requests for as long as notice is to be given,
then stops listening, lets what runs finish within a limit, lets the workers finish, and ends.
"""

from __future__ import annotations

import asyncio
import gc
import logging
import socket
import time
from types import FrameType
from typing import Final

import uvicorn
from fastapi import FastAPI
from uvicorn.protocols.http.httptools_impl import HttpToolsProtocol

from fhirgallop.codes import fhirjson
from fhirgallop.outcome import Issue, operation_outcome
from fhirgallop.service.answers import FHIR_JSON
from fhirgallop.service.readiness import Readiness
from fhirgallop.settings import Settings

log: Final = logging.getLogger("fhirgallop.service")

_LONGEST_HEAD: Final = 64 * 1024
_REASONS: Final = {400: "Bad Request", 408: "Request Timeout", 431: "Request Header Fields Too Large"}


def serve(app: FastAPI, settings: Settings) -> None:
    """Serves an application until the process is told to end.

    Raises:
        SystemExit: the address cannot be listened on, or the certificate cannot be used.
    """
    Server(app, settings).run()


class Server(uvicorn.Server):
    """uvicorn's server, which gives notice before it ends."""

    def __init__(self, app: FastAPI, settings: Settings) -> None:
        class Connection(_Connection):
            patience = settings.header_seconds

        super().__init__(
            uvicorn.Config(
                app,
                host=settings.host,
                port=settings.port,
                http=Connection,
                ws="none",
                access_log=False,
                log_config=None,
                server_header=False,
                proxy_headers=settings.behind_proxy,
                forwarded_allow_ips=sorted(settings.proxies),
                ssl_certfile=settings.certificate,
                ssl_keyfile=settings.certificate_key,
                timeout_keep_alive=settings.idle_seconds,
                timeout_graceful_shutdown=settings.finish_seconds,
            )
        )
        self._readiness: Readiness = app.state.readiness
        self._notice = settings.notice_seconds
        self._ends_at: float | None = None

    async def startup(self, sockets: list[socket.socket] | None = None) -> None:
        """Starts, and lays aside what was loaded: it stays for good.

        A full collection of garbage would walk through all of it, a tenth of a second, while somebody waits.
        """
        await super().startup(sockets)
        gc.collect()
        gc.freeze()

    def handle_exit(self, sig: int, frame: FrameType | None) -> None:
        """Gives notice the first time, and ends; at once the second time."""
        told_before = self._readiness.draining
        self._readiness.draining = True
        if self._notice and not told_before:
            self._ends_at = time.monotonic() + self._notice
            self._captured_signals.append(sig)
            return
        super().handle_exit(sig, frame)

    async def on_tick(self, counter: int) -> bool:
        """Looks whether the notice is over."""
        if self._ends_at is not None and time.monotonic() >= self._ends_at:
            self.should_exit = True
        return await super().on_tick(counter)


class _Connection(HttpToolsProtocol):
    """One connection: the head of a request has to arrive in time, and may not be endless."""

    patience = 10.0

    _timer: asyncio.TimerHandle | None = None
    _in_head = True
    _head = 0

    def connection_made(self, transport: asyncio.Transport) -> None:  # type: ignore[override]
        """Starts to wait for the first request."""
        super().connection_made(transport)
        self._wait()

    def on_message_begin(self) -> None:
        """A request begins."""
        super().on_message_begin()
        self._in_head, self._head = True, 0
        self._wait()

    def on_headers_complete(self) -> None:
        """The head is there; its body has a patience of its own."""
        self._in_head = False
        self._stop()
        super().on_headers_complete()

    def data_received(self, data: bytes) -> None:
        """Takes what arrived, and refuses a head that does not end."""
        super().data_received(data)
        if self._in_head:
            self._head += len(data)
            if self._head > _LONGEST_HEAD:
                self._refuse(431, "too-long", "http-head-too-large", "The request's headers are too long.")

    def connection_lost(self, exc: Exception | None) -> None:
        """Waits no longer."""
        self._stop()
        super().connection_lost(exc)

    def send_400_response(self, msg: str) -> None:
        """What is no HTTP is told in the form of every other refusal."""
        self._refuse(400, "structure", "http-malformed", msg)

    def _wait(self) -> None:
        if self._timer is None:
            self._timer = self.loop.call_later(self.patience, self._too_slow)

    def _stop(self) -> None:
        if self._timer is not None:
            self._timer.cancel()
            self._timer = None

    def _too_slow(self) -> None:
        self._refuse(408, "timeout", "http-too-slow", "The head of the request took too long to arrive.")

    def _refuse(self, status: int, code: str, rule: str, text: str) -> None:
        self._stop()
        if self.transport.is_closing():
            return
        body = fhirjson.write(operation_outcome([Issue("error", code, rule, text)]))
        head = (
            f"HTTP/1.1 {status} {_REASONS[status]}\r\nContent-Type: {FHIR_JSON}\r\n"
            f"Content-Length: {len(body)}\r\nConnection: close\r\n\r\n"
        )
        self.transport.write(head.encode() + body)
        self.transport.close()
        log.info("refused before it was a request", extra={"status": status, "rule": rule})
