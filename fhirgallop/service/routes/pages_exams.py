"""/exams as pages: the latest examinations, one of them with its cards, and what is answered to these."""

from __future__ import annotations

import uuid
from dataclasses import dataclass
from typing import Any, Final

from fastapi import APIRouter, Depends, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import RedirectResponse, Response

from fhirgallop.cards.memory import Answer
from fhirgallop.cards.safety import SAFETY_TEXTS
from fhirgallop.codes import fhirjson
from fhirgallop.drawing.cycle import heart_cycle
from fhirgallop.drawing.heart_cycle import draw
from fhirgallop.drawing.wording import description
from fhirgallop.exam.context import Context
from fhirgallop.exam.presence import Presence
from fhirgallop.outcome import Issue, has_errors
from fhirgallop.service import answers, audit
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.desk.forms import files, form, word
from fhirgallop.service.pages.rendering import page, render
from fhirgallop.service.views.answering import LABELS, MOST_REASON, Answers, carried, read_carried
from fhirgallop.service.views.considering import Considered, consider
from fhirgallop.service.views.examination import Examination, counted, read_examination, read_head
from fhirgallop.service.views.looking_up import look_up
from fhirgallop.service.views.record_system import RecordSystem
from fhirgallop.service.views.remarks import remarks
from fhirgallop.storage.exam_search import ExamSearch
from fhirgallop.storage.submissions import Submission

router = APIRouter(
    include_in_schema=False, dependencies=[Depends(needs(roles=("clinician", "informatician")))]
)

_MOST_TYPED: Final = 400
# the fields of an answer, and how long each may be
_ANSWER: Final = {"card": 60_000, "answer": 40, "reason": MOST_REASON}


@dataclass(frozen=True, slots=True)
class Opened:
    """One version of an examination, read and considered."""

    row: Submission
    exam: Examination
    considered: Considered
    chart: bool


@router.get("/exams")
async def list_exams(request: Request) -> Response:
    """The latest examinations, or those of one patient or number."""
    asked = request.query_params
    patient, number = (word(asked, name, _MOST_TYPED) for name in ("patient", "number"))
    before = int(asked.get("before", "0")) if asked.get("before", "0").isdecimal() else 0
    search: ExamSearch = request.app.state.exam_search
    templates = request.app.state.shelf.values()
    found = await run_in_threadpool(
        look_up, search, templates, patient=patient, number=number, before=min(before, 2**62)
    )
    audit.about(
        request,
        interaction="search-type",
        patients=[one.patient for one in found.listed],
        entities=[f"urn:uuid:{one.id}" for one in found.listed],
    )
    return page(request, "exams.html", found=found, patient=patient, number=number, first=not before)


@router.get("/exams/{exam}")
async def one_exam(request: Request, exam: str) -> Response:
    """One examination as a chart would show it."""
    return await run_in_threadpool(_exam_page, request, exam)


@router.post("/exams/{exam}/chart")
async def with_chart(request: Request, exam: str) -> Response:
    """The same, held against a chart that is handed in; nothing of the chart is kept."""
    sent = await form(request)
    given = files(sent, "chart")
    if word(sent, "from") == "record-system":
        return await run_in_threadpool(_with_fetched, request, exam)
    return await run_in_threadpool(_with_chart, request, exam, given)


@router.post("/exams/{exam}/answers")
async def answer(request: Request, exam: str) -> Response:
    """Keeps what was answered to a card."""
    sent = await form(request)
    told = {name: word(sent, name, most) for name, most in _ANSWER.items()}
    return await run_in_threadpool(_answered, request, exam, told)


@router.get("/exams/{exam}/heart-cycle.svg")
async def drawing(request: Request, exam: str) -> Response:
    """The heart cycle of an examination as a picture."""
    return await run_in_threadpool(_drawing, request, exam)


def _exam_page(request: Request, exam: str) -> Response:
    return _page(request, _open(request, exam, None))


def _with_chart(request: Request, exam: str, given: list[tuple[str, bytes]]) -> Response:
    chart, issues = _chart(given)
    opened = _open(request, exam, chart)
    return _page(request, opened, chart_issues=issues, status=422 if has_errors(issues) else 200)


def _with_fetched(request: Request, exam: str) -> Response:
    source: RecordSystem | None = request.app.state.record_system
    if source is None:
        text = "No record system is set to be read from here; hand the chart in as a file."
        raise answers.refusal(404, "not-found", "page-record-system", text)
    fetched = source.read(read_head(_row(request, exam).bundle).patient)
    issues = [
        Issue("warning", "incomplete", "page-record-system", f"Unknown: {gap}.") for gap in fetched.gaps
    ]
    return _page(request, _open(request, exam, fetched.chart), chart_issues=issues)


def _chart(given: list[tuple[str, bytes]]) -> tuple[Any, list[Issue]]:
    if not given:
        words = "No file was handed in; choose a FHIR Bundle (JSON) of this patient's resources."
        return None, [Issue("error", "required", "page-chart", words)]
    value, issues = fhirjson.read(given[0][1], source="chart")
    if has_errors(issues) or not isinstance(value, dict | list):
        words = "This is no FHIR JSON; hand in a Bundle of this patient's resources."
        return None, issues or [Issue("error", "structure", "page-chart", words)]
    return value, []


def _open(request: Request, exam: str, chart: Any) -> Opened:
    """The version that is asked for, else the last one; the audit trail hears of it."""
    row = _row(request, exam)
    audit.about(request, action="R", interaction="read", patients=[row.patient], entities=[row.exam])
    state = request.app.state
    now = state.clock()
    read = read_examination(row.bundle, now)
    considered = consider(read, chart, now, rules=state.hooks.rules, policy=state.policy)
    return Opened(row, read, considered, chart is not None)


def _row(request: Request, exam: str) -> Submission:
    search: ExamSearch = request.app.state.exam_search
    try:
        identity = f"urn:uuid:{uuid.UUID(exam)}"
    except ValueError:
        raise _unknown() from None
    asked = request.query_params.get("version", "")
    rows = search.versions(identity)
    wanted = int(asked) if asked.isdecimal() and len(asked) < 19 else rows[0].id if rows else 0
    row = search.version(identity, wanted)
    if row is None:
        raise _unknown()
    return row


def _unknown() -> answers.RefusalError:
    text = "There is no such examination here, or none any more. Look it up in the list of examinations."
    return answers.refusal(404, "not-found", "http-unknown-exam", text)


def _page(
    request: Request,
    opened: Opened,
    *,
    chart_issues: list[Issue] | None = None,
    status: int = 200,
) -> Response:
    search: ExamSearch = request.app.state.exam_search
    desk: Answers = request.app.state.card_answers
    cycle = _cycle(opened)
    cards = [one.card.key for one in (*opened.considered.cards, *opened.considered.folded)]
    versions = search.versions(opened.row.exam)
    return page(
        request,
        "exam.html",
        status=status,
        id=opened.row.exam.removeprefix("urn:uuid:"),
        row=opened.row,
        newest=versions[0],
        versions=versions,
        exam=opened.exam,
        counts=counted(opened.exam.parts),
        Presence=Presence,
        considered=opened.considered,
        chart=opened.chart,
        record_system=request.app.state.record_system is not None,
        chart_issues=chart_issues or [],
        given=desk.given(opened.row.exam, cards),
        labels=LABELS,
        carried=carried,
        most_reason=MOST_REASON,
        drawn=draw(cycle, "Heart cycle of this examination"),
        told=description(cycle),
        remarks=remarks(opened.row, opened.exam),
        safety=SAFETY_TEXTS,
        shadow=request.app.state.policy.shadow,
    )


def _cycle(opened: Opened) -> Any:
    context: Context | None = opened.considered.context
    return heart_cycle(opened.exam.own.exam, context)


def _answered(request: Request, exam: str, told: dict[str, str]) -> Response:
    row = _row(request, exam)
    state = request.app.state
    card = read_carried(told["card"], state.hooks.rules)
    chosen = next((one for one in Answer if one.value == told["answer"]), None)
    if card is None or chosen is None or chosen not in card.answers:
        text = "This card takes no such answer; open the examination again, and answer there."
        raise answers.refusal(422, "value", "page-card", text)
    audit.about(request, action="C", interaction="create", patients=[row.patient], entities=[row.exam])
    desk: Answers = state.card_answers
    desk.keep(
        row.exam, row.patient, card, chosen, told["reason"], request.state.caller.name, audit.kept(request)
    )
    for rule in card.rules:
        state.metrics.card_answer(rule, "overridden")
    if request.headers.get("hx-request"):
        listed = desk.given(row.exam, [card.key]).get(card.key, [])
        return Response(render(request, "exam_answered.html", listed=listed), media_type="text/html")
    return RedirectResponse(f"/exams/{exam}#card-{card.key}", 303)


def _drawing(request: Request, exam: str) -> Response:
    row = _row(request, exam)
    audit.about(request, action="R", interaction="read", patients=[row.patient], entities=[row.exam])
    read = read_examination(row.bundle, request.app.state.clock())
    return Response(draw(heart_cycle(read.own.exam)), media_type="image/svg+xml")
