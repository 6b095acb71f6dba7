"""The application: its routes, and error answers that are always an OperationOutcome."""

from __future__ import annotations

import logging
from collections.abc import AsyncIterator, Callable, Mapping, Sequence
from contextlib import asynccontextmanager
from datetime import UTC, datetime
from functools import partial
from typing import Final

from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from starlette.exceptions import HTTPException
from starlette.responses import Response
from starlette.routing import Match

from fhirgallop.cards.policy import Policy
from fhirgallop.delivery.dispatch import open_dispatch
from fhirgallop.observations.bundle import instant
from fhirgallop.outcome import Issue
from fhirgallop.reasoning import rulebook
from fhirgallop.service import answers
from fhirgallop.service.auth.opening import open_gate, public_keys
from fhirgallop.service.batch_desk import BatchDesk
from fhirgallop.service.batch_work import BatchWork, batches_coded
from fhirgallop.service.delivering import delivering, delivery_trail, readings
from fhirgallop.service.desk.desk import Desk
from fhirgallop.service.exam_desk import ExamDesk
from fhirgallop.service.examinations import Examinations
from fhirgallop.service.fetching import open_fetcher
from fhirgallop.service.fhir.opening import open_fhir
from fhirgallop.service.hook_desk import HookDesk, Manner
from fhirgallop.service.housekeeping import house_kept, keeping
from fhirgallop.service.keyed import KeyDesk
from fhirgallop.service.operation import new_id, watch_over
from fhirgallop.service.pages.rendering import fault_page
from fhirgallop.service.routes import (
    about,
    batches,
    exams,
    hooks,
    maps,
    pages_deliveries,
    pages_desk,
    pages_desk_draft,
    pages_desk_publish,
    pages_exams,
    pages_home,
    pages_knowledge,
    sign_in,
    static,
    validation,
    watching,
    well_known,
)
from fhirgallop.service.rule_tally import RuleTally, rules_counted
from fhirgallop.service.shelf import Shelf, keep_versions, load_shelf
from fhirgallop.service.views.answering import Answers as CardAnswers
from fhirgallop.service.views.record_system import record_system
from fhirgallop.settings import Settings
from fhirgallop.storage.batches import Batches
from fhirgallop.storage.engine import open_database
from fhirgallop.storage.exam_search import ExamSearch
from fhirgallop.storage.hooks import HookStore
from fhirgallop.storage.idempotency import Answers
from fhirgallop.storage.maps import MapStore
from fhirgallop.storage.outbox import Outbox
from fhirgallop.storage.publications import Publications
from fhirgallop.storage.rule_counts import RuleCounts
from fhirgallop.storage.submissions import Submissions
from fhirgallop.version import VERSION

_ABOUT: Final = (
    "Turns a clinic's heart examinations into coded FHIR Observations by template maps. Support for clinical "
    "judgement, not a replacement for it. Every error is answered with an OperationOutcome."
)
_METHODS: Final = ("DELETE", "GET", "OPTIONS", "PATCH", "POST", "PUT")
log: Final = logging.getLogger("fhirgallop.service")
_CODES: Final = {404: "not-found", 405: "not-supported", 413: "too-long"}


def now() -> datetime:
    """The clock of the running service."""
    return datetime.now(tz=UTC)


def create_app(settings: Settings, clock: Callable[[], datetime] = now) -> FastAPI:
    """The service for these settings.

    Raises:
        SettingsError: maps or database cannot be used; the message says why.
    """
    shelf = load_shelf(settings.maps)  # before the database: what cannot start leaves nothing behind
    fetcher = open_fetcher(settings)
    engine = open_database(settings.database, durable=settings.durable)
    # the kind alone: an address may hold a password; a file where a server was meant is seen at once
    log.info("the database is %s", "an embedded file" if engine.dialect.name == "sqlite" else "PostgreSQL")
    keep_versions(shelf, MapStore(engine), at=instant(clock()))

    @asynccontextmanager
    async def lifespan(_app: FastAPI) -> AsyncIterator[None]:
        _app.state.readiness.try_out()
        async with (
            house_kept(engine, keeping(settings), clock),
            rules_counted(_app.state.rule_tally),
            delivering(dispatch, settings.finish_seconds),
            batches_coded(_app.state.batch_work, settings.finish_seconds),
        ):
            yield
        if fetcher:
            fetcher.close()
        _app.state.gate.close()
        engine.dispose()

    app = FastAPI(
        title="fhirgallop",
        version=VERSION,
        description=_ABOUT,
        docs_url=None,
        redoc_url=None,
        lifespan=lifespan,
    )
    app.state.settings = settings
    app.state.gate = open_gate(settings, engine, clock)
    app.state.public_keys = public_keys(settings)
    app.state.shelf = Shelf({name: one.template for name, one in shelf.items()}, Publications(engine))
    policy = Policy(shadow=settings.cards_shadow)
    keys = KeyDesk(Answers(engine), clock, settings.idempotency_hours)
    app.state.clock = clock
    app.state.policy = policy
    app.state.desk = Desk(engine, app.state.shelf, clock, new_id, second_person=settings.second_person)
    app.state.fetcher = fetcher
    for router in (
        exams.router,
        batches.router,
        hooks.router,
        static.router,
        validation.router,
        maps.router,
        about.router,
        watching.router,
        well_known.router,
        sign_in.router,
        pages_desk.router,
        pages_desk_draft.router,
        pages_desk_publish.router,
        pages_home.router,
        pages_exams.router,
        pages_knowledge.router,
        pages_deliveries.router,
    ):
        app.include_router(router)
    open_fhir(app, engine, app.state.shelf, clock)
    watch_over(app, engine, settings, clock)
    dispatch = open_dispatch(
        settings, engine, clock, threads=settings.delivery_workers,
        trail=delivery_trail(app.state.audit, settings),
    )  # fmt: skip
    app.state.dispatch = dispatch
    if dispatch:
        app.state.metrics.watch(partial(readings, dispatch))
    manner = Manner(policy, settings.cards_critical, settings.pages.rstrip("/"), settings.cds_system_actions)
    app.state.rule_counts = RuleCounts(engine)
    app.state.rule_tally = RuleTally(app.state.rule_counts, clock)
    app.state.hooks = HookDesk(
        HookStore(engine), clock, rulebook.load(), manner, app.state.metrics, app.state.rule_tally.raised
    )
    app.state.exam_search = ExamSearch(engine)
    app.state.card_answers = CardAnswers(HookStore(engine), clock)
    app.state.outbox = Outbox(engine)
    app.state.record_system = record_system(settings, fetcher)
    app.state.exams = ExamDesk(
        Examinations(
            Submissions(engine), clock, delivered=(settings.edition, settings.snomed) if dispatch else None
        ),
        keys, clock, rulebook.load(), policy,
        app.state.metrics.examination,
    )  # fmt: skip
    work = BatchWork(engine, app.state.exams, app.state.shelf, settings, clock, app.state.audit, new_id)
    app.state.batch_work = work
    app.state.batches = BatchDesk(Batches(engine), keys, settings, clock, new_id, work.wake)
    app.exception_handler(answers.RefusalError)(_refused)
    app.exception_handler(RequestValidationError)(_invalid)
    app.exception_handler(HTTPException)(_plain)
    return app


async def _refused(request: Request, error: Exception) -> Response:
    assert isinstance(error, answers.RefusalError)  # noqa: S101 - registered for this class alone
    return _told(request, error.status, error.issues, error.headers)


async def _invalid(request: Request, error: Exception) -> Response:
    assert isinstance(error, RequestValidationError)  # noqa: S101 - registered for this class alone
    issues = [
        Issue("error", "required" if fault["type"] == "missing" else "value", "http-parameter",
              f"Parameter {fault['loc'][-1]}: {fault['msg']}.")
        for fault in error.errors()
    ]  # fmt: skip
    return _told(request, 400, issues)


async def _plain(request: Request, error: Exception) -> Response:
    assert isinstance(error, HTTPException)  # noqa: S101 - registered for this class alone
    text = {404: "There is nothing at this address; /docs lists the addresses.",
            405: "This address does not take that method; /docs lists what it takes."}  # fmt: skip
    said = text.get(error.status_code, "The request cannot be served.")
    code = _CODES.get(error.status_code, "processing")
    issue = Issue("error", code, f"http-{error.status_code}", said)
    headers = {"Allow": _methods(request)} if error.status_code == 405 else error.headers
    return _told(request, error.status_code, [issue], headers)


def _methods(request: Request) -> str:
    """What the address takes, by all of its routes (RFC 9110, 10.2.1); the framework says one."""
    scope, routes = request.scope, request.app.routes
    found = [
        method
        for method in _METHODS
        if any(route.matches({**scope, "method": method})[0] is Match.FULL for route in routes)
    ]
    return ", ".join(found).replace("GET", "GET, HEAD")


def _told(
    request: Request, status: int, issues: Sequence[Issue], headers: Mapping[str, str] | None = None
) -> Response:
    request.state.issues = issues  # the audit trail holds them too
    page = request.method in ("GET", "POST") and "text/html" in request.headers.get("accept", "")
    if page and not request.url.path.startswith("/fhir/"):  # there every error is an OperationOutcome
        return fault_page(request, status, issues, headers)
    return answers.outcome_answer(status, issues, headers)
