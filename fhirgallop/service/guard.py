"""What stands around every request: who may ask, safe headers, answers to what breaks, a log without data."""

from __future__ import annotations

import logging
import time
from collections.abc import Awaitable, Callable
from typing import Final
from urllib.parse import urlsplit

from starlette.requests import Request
from starlette.responses import Response

from fhirgallop.outcome import Issue
from fhirgallop.service import answers
from fhirgallop.storage.submissions import StorageError

log: Final = logging.getLogger("fhirgallop.service")

STORAGE_FAILED: Final = Issue(
    "fatal", "transient", "storage-failed",
    "The examination could not be stored, and nothing of it was kept; send it again later.",
)  # fmt: skip


async def guard(request: Request, call_next: Callable[[Request], Awaitable[Response]]) -> Response:
    """Lets a request through or not; what comes back has safe headers and leaves one line in the log."""
    start = time.perf_counter()
    response = _misled(request) or await _answered(request, call_next)
    for name, value in answers.SAFE_HEADERS.items():
        response.headers.setdefault(name, value)
    # the route's pattern and never the address itself: what a client writes there may be a patient's
    path = getattr(request.scope.get("route"), "path", "(none)")
    took = (time.perf_counter() - start) * 1000
    log.info("%s %s %s %.1f ms", request.method, path, response.status_code, took)
    return response


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


async def _answered(request: Request, call_next: Callable[[Request], Awaitable[Response]]) -> Response:
    try:
        return await call_next(request)
    except StorageError as error:
        # no traceback: its text may hold what was sent
        log.error("storage failed: %s", error)  # noqa: TRY400
        return answers.outcome_answer(503, [STORAGE_FAILED], {"Retry-After": "30"})
    except Exception as error:  # noqa: BLE001 - the last line of defence: an answer, and no data in the log
        log.error("unexpected %s at %s", type(error).__name__, _place(error))  # noqa: TRY400
        text = "Something broke here; nothing of the request was kept. Tell the operator the time of day."
        return answers.outcome_answer(500, [Issue("fatal", "exception", "service-broke", text)])


def _place(error: BaseException) -> str:
    trace = error.__traceback__
    while trace and trace.tb_next:
        trace = trace.tb_next
    return f"{trace.tb_frame.f_code.co_filename}:{trace.tb_lineno}" if trace else "(nowhere)"
