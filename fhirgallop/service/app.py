"""The application: routes, error answers, safe headers, and a log without patient data."""

from __future__ import annotations

import logging
import time
from collections.abc import Awaitable, Callable
from datetime import UTC, datetime
from typing import Final

from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from sqlalchemy.exc import SQLAlchemyError
from starlette.exceptions import HTTPException
from starlette.responses import Response

from fhirgallop.outcome import Issue
from fhirgallop.service import answers
from fhirgallop.service.examinations import Examinations
from fhirgallop.service.routes import about, exams, maps
from fhirgallop.service.shelf import load_shelf
from fhirgallop.settings import Settings
from fhirgallop.storage.engine import open_database
from fhirgallop.storage.submissions import Submissions
from fhirgallop.version import VERSION

log: Final = logging.getLogger("fhirgallop.service")

_ABOUT: Final = (
    "Turns a clinic's heart examinations into coded FHIR Observations by template maps. Support for clinical "
    "judgement, not a replacement for it. Every error is answered with an OperationOutcome."
)
_CODES: Final = {404: "not-found", 405: "not-supported", 413: "too-long"}


def now() -> datetime:
    """The clock of the running service."""
    return datetime.now(tz=UTC)


def create_app(settings: Settings, clock: Callable[[], datetime] = now) -> FastAPI:
    """The service for these settings.

    Raises:
        SettingsError: maps or database cannot be used; the message says why.
    """
    app = FastAPI(title="fhirgallop", version=VERSION, description=_ABOUT, docs_url=None, redoc_url=None)
    engine = open_database(settings.database)
    app.state.settings = settings
    app.state.shelf = load_shelf(settings.maps)
    app.state.engine = engine
    app.state.examinations = Examinations(Submissions(engine), clock)
    for router in (exams.router, maps.router, about.router):
        app.include_router(router)
    app.middleware("http")(_guard)
    app.exception_handler(answers.RefusalError)(_refused)
    app.exception_handler(RequestValidationError)(_invalid)
    app.exception_handler(HTTPException)(_plain)
    return app


async def _guard(request: Request, call_next: Callable[[Request], Awaitable[Response]]) -> Response:
    """Safe headers on every answer; what breaks is answered and logged without what was sent."""
    start = time.perf_counter()
    try:
        response = await call_next(request)
    except SQLAlchemyError as error:
        # no traceback: its text may hold what was sent
        log.error("storage failed: %s", type(getattr(error, "orig", None) or error).__name__)  # noqa: TRY400
        text = "The examination could not be stored, and nothing of it was kept; send it again later."
        response = answers.outcome_answer(503, [Issue("fatal", "transient", "storage-failed", text)])
        response.headers["Retry-After"] = "30"
    except Exception as error:  # noqa: BLE001 - the last line of defence: an answer, and no data in the log
        log.error("unexpected %s at %s", type(error).__name__, _place(error))  # noqa: TRY400
        text = "Something broke here; nothing of the request was kept. Tell the operator the time of day."
        response = answers.outcome_answer(500, [Issue("fatal", "exception", "service-broke", text)])
    for name, value in answers.SAFE_HEADERS.items():
        response.headers.setdefault(name, value)
    route = request.scope.get("route")
    path = getattr(route, "path", "(none)")
    log.info(
        "%s %s %s %.1f ms", request.method, path, response.status_code, (time.perf_counter() - start) * 1000
    )
    return response


def _place(error: BaseException) -> str:
    trace = error.__traceback__
    while trace and trace.tb_next:
        trace = trace.tb_next
    return f"{trace.tb_frame.f_code.co_filename}:{trace.tb_lineno}" if trace else "(nowhere)"


async def _refused(_request: Request, error: Exception) -> Response:
    assert isinstance(error, answers.RefusalError)  # noqa: S101 - registered for this class alone
    return answers.outcome_answer(error.status, error.issues, error.headers)


async def _invalid(_request: Request, error: Exception) -> Response:
    assert isinstance(error, RequestValidationError)  # noqa: S101 - registered for this class alone
    issues = [
        Issue("error", "required" if fault["type"] == "missing" else "value", "http-parameter",
              f"Parameter {fault['loc'][-1]}: {fault['msg']}.")
        for fault in error.errors()
    ]  # fmt: skip
    return answers.outcome_answer(400, issues)


async def _plain(_request: Request, error: Exception) -> Response:
    assert isinstance(error, HTTPException)  # noqa: S101 - registered for this class alone
    text = {404: "There is nothing at this address; /docs lists the addresses.",
            405: "This address does not take that method; /docs lists what it takes."}  # fmt: skip
    said = text.get(error.status_code, "The request cannot be served.")
    code = _CODES.get(error.status_code, "processing")
    issue = Issue("error", code, f"http-{error.status_code}", said)
    return answers.outcome_answer(error.status_code, [issue], error.headers)
