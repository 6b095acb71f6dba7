"""POST /exams: an examination in the clinic's own words in, a coded Bundle with issues and review out."""

from __future__ import annotations

import codecs
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from itertools import islice
from typing import Annotated, Any, Final

from fastapi import APIRouter, Depends, Query, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import Response

from fhirgallop.codes import fhirjson
from fhirgallop.intake.detect import BY_CONTENT_TYPE, open_records
from fhirgallop.intake.limits import DEFAULT
from fhirgallop.intake.reading import Read
from fhirgallop.intake.record import LocalRecord
from fhirgallop.observations.editions import Edition
from fhirgallop.outcome import Issue, has_errors
from fhirgallop.service import answers, audit, enclosed, requests
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.batch_desk import BatchDesk, unreadable
from fhirgallop.service.exam_desk import BUSY, Ask, ExamDesk, Opinion
from fhirgallop.service.examinations import BusyError, Coded, Wish, done_to
from fhirgallop.service.keyed import Keyed, Reply, keyed
from fhirgallop.service.limits import in_turn
from fhirgallop.settings import Settings
from fhirgallop.storage.submissions import Also

router = APIRouter(tags=["examinations"])

# what one examination may write
WRITTEN: Final = ("Observation", "DiagnosticReport", "Provenance")

_SEVERAL: Final = frozenset({"ndjson", "csv", "tsv", "workbook"})
_HL7: Final = tuple(kind for kind, read in BY_CONTENT_TYPE.items() if read == "hl7")
_ANSWERS: Final = (answers.PLAIN_JSON, answers.FHIR_JSON, *_HL7)
_PARAMETERS: Final = ("map", "edition", "snomed", "review")
_STATUSES: Final[dict[int | str, dict[str, Any]]] = {
    200: {
        "description": "Coded; or, as HL7 v2, acknowledged.",
        "content": {kind: {} for kind in _ANSWERS},
    },
    202: answers.told("Taken in, to be coded later; Content-Location says where to ask."),
    400: answers.told("The body, or a parameter, is malformed."),
    404: answers.told("There is no map of that name."),
    406: answers.told("Nothing acceptable can be answered."),
    408: answers.told("The body took too long to arrive."),
    409: answers.told("Other requests are changing this examination."),
    413: answers.told("The body is too large, too deep, or holds too many examinations."),
    415: answers.told("The kind of body is not read here."),
    422: answers.told("The record cannot be coded by this map, or the key was another request's."),
    503: answers.told("The examination could not be stored; send it again later."),
    **answers.REFUSALS,
}
_BODIES: Final[dict[str, Any]] = {kind: {"schema": {"type": "string"}} for kind in BY_CONTENT_TYPE}
_BODIES["application/json"] = {"schema": {"type": "object"}}
_BODIES[enclosed.FORM] = {
    "schema": {
        "type": "object",
        "properties": {name: {"type": "string"} for name in (enclosed.RECORD, enclosed.CHART)},
        "required": [enclosed.RECORD, enclosed.CHART],
    }
}
_HEADERS: Final = [
    {
        "name": "Idempotency-Key",
        "in": "header",
        "description": "A string of the sender's own: the same request with it gets the same answer again.",
        "schema": {"type": "string", "minLength": 8, "maxLength": 202},
    },
    {
        "name": "Prefer",
        "in": "header",
        "description": "`respond-async`: answer at once, code later.",
        "schema": {"type": "string"},
    },
]


@dataclass(frozen=True, slots=True)
class Sent:
    """The body of a request: the records, their media type, and the chart where one came along."""

    content: bytes
    kind: str
    chart: Any = None


@router.post(
    "/exams",
    summary="Code one examination, or several",
    description=(
        "The body is one examination (JSON object, HL7 v2 ORU^R01, FHIR QuestionnaireResponse) or several "
        "(JSON list, NDJSON, CSV, spreadsheet). One is answered with `{bundle, outcome, review, unread, "
        "unknown}`, or with the bare transaction Bundle where `Accept: application/fhir+json` is sent (the "
        "header `Fhirgallop-Issues` then counts the issues). A list, a table or NDJSON is answered with "
        "`{coded, refused, results}`: one such object a record, in order, with its `status` (coded, refused, "
        "unreadable, not-stored). The same examination sent twice gets the same Bundle; a changed one amends "
        "its resources.\n\n"
        "`multipart/form-data` with the parts `record` and `chart` (a FHIR Bundle of the same patient) has "
        "the examination reviewed against the chart; without one it is held against itself. That a review "
        "raises nothing is no reassurance.\n\n"
        "An HL7 v2 message with `Accept: application/hl7-v2` is answered with its acknowledgement (AA, AE, "
        "AR). With `Idempotency-Key` a request that is sent again gets the very same bytes.\n\n"
        "With `Prefer: respond-async` the answer is 202 and, in `Content-Location`, the address where to ask "
        "how far the examinations are; they are coded one by one, and the batch outlives a restart."
    ),
    openapi_extra={"requestBody": {"required": True, "content": _BODIES}, "parameters": _HEADERS},
    dependencies=[Depends(needs(does="cu", to=WRITTEN))],
    responses=_STATUSES,
)
async def post_exams(
    request: Request,
    map: Annotated[str, Query(description="Name of a published template map.", max_length=200)],  # noqa: A002
    edition: Annotated[Edition | None, Query(description="FHIR edition; R4 unless set otherwise.")] = None,
    snomed: Annotated[bool | None, Query(description="Write SNOMED CT codings.")] = None,
    review: Annotated[
        Opinion | None,
        Query(description="How much of a review: none, short (for one) or full; none for several."),
    ] = None,
) -> Response:
    """Codes what the body holds."""
    requests.only_known(request, _PARAMETERS)
    settings: Settings = request.app.state.settings
    template = request.app.state.shelf.get(map)
    if template is None:
        text = "There is no template map of that name; GET /maps lists them."
        raise answers.refusal(404, "not-found", "http-unknown-map", text)
    wish = Wish(template, edition or settings.edition, settings.snomed if snomed is None else snomed)
    if requests.prefers(request, "respond-async"):
        return await _taken(request, wish, review or "none")
    answer = requests.accepted(request, _ANSWERS)
    sent, key = await _sent(request, settings)
    if answer in _HL7 and sent.kind not in _HL7:
        text = f"Only an HL7 v2 message is acknowledged; ask for {answers.PLAIN_JSON}."
        raise answers.refusal(406, "not-supported", "http-accept-hl7", text)
    ask = Ask(wish, answer, review, sent.chart, key, _watch(request))
    try:
        reply = await in_turn(request, "examination", _answer, request.app.state.exams, sent, ask, settings)
    except BusyError:
        raise answers.RefusalError(409, [BUSY], {"Retry-After": "1"}) from None
    if reply.repeated:
        audit.about(request, action="R", interaction="read", patients=[reply.patient])
    return reply.response()


async def _taken(request: Request, wish: Wish, review: Opinion) -> Response:
    """A batch: answered at once, coded later."""
    settings: Settings = request.app.state.settings
    desk: BatchDesk = request.app.state.batches
    kind = requests.content_type(request)
    body = await requests.body(request, settings.batch_body)
    caller, key = request.state.caller, keyed(request, kind, body)
    audit.about(request, action="C", interaction="batch")
    try:
        reply = await run_in_threadpool(
            desk.take, body, kind, wish, review, caller, key, requests.base(request)
        )
    except BusyError:
        raise answers.RefusalError(409, [BUSY], {"Retry-After": "1"}) from None
    return reply.response()


async def _sent(request: Request, settings: Settings) -> tuple[Sent, Keyed | None]:
    """The body, and the key it came with."""
    header = request.headers.get("content-type", "")
    form = header.partition(";")[0].strip().lower() == enclosed.FORM
    kind = enclosed.FORM if form else requests.content_type(request)
    body = await requests.body(request, settings.max_body)
    if not form:
        return Sent(body, kind), keyed(request, kind, body)
    found = enclosed.parts(body, header)
    record, chart = (bytes(found[name].content) for name in (enclosed.RECORD, enclosed.CHART))
    read_as = requests.known_type(found[enclosed.RECORD].content_type)
    return Sent(record, read_as, _chart(chart)), keyed(request, read_as, record, chart)


def _chart(text: bytes) -> Any:
    value, issues = fhirjson.read(text, source=enclosed.CHART)
    if has_errors(issues) or not isinstance(value, dict | list):
        words = "The chart is no JSON object: send a FHIR Bundle of the patient's resources."
        raise answers.RefusalError(400, issues or [Issue("error", "structure", "http-chart", words)])
    return value


def _watch(request: Request) -> Callable[[Coded], Also]:
    def watched(coded: Coded) -> Also:
        action, interaction = done_to(coded)
        whose = {"patients": [coded.patient], "entities": [coded.identity] if coded.identity else []}
        audit.about(request, action=action, interaction=interaction, **whose)
        if coded.bundle is None:
            return audit.kept(request, status=422, issues=coded.result.issues)
        return audit.kept(request)

    return watched


def _answer(desk: ExamDesk, sent: Sent, ask: Ask, settings: Settings) -> Reply:
    if reply := desk.again(ask.keyed):
        return reply
    reads = _records(sent, settings)
    if ask.answer in _HL7:
        return desk.acknowledged(sent.content, reads, ask)
    if not any(isinstance(read, LocalRecord) for read in reads):
        raise unreadable([issue for read in reads for issue in read.issues])
    if is_one(reads, sent.kind, sent.content):
        return desk.one(reads[0], ask)
    if ask.answer == answers.FHIR_JSON:
        text = f"Several examinations have no bare Bundle; ask for {answers.PLAIN_JSON}."
        raise answers.refusal(406, "not-supported", "http-accept-several", text)
    if ask.chart is not None:
        text = "A chart goes with one examination; send each with its own."
        raise answers.refusal(400, "structure", "http-chart-several", text)
    return desk.several(reads, ask)


def _records(sent: Sent, settings: Settings) -> Sequence[Read]:
    limits = replace(DEFAULT, depth=settings.max_depth)
    records = open_records(sent.content, content_type=sent.kind, limits=limits)
    reads = list(islice(records, settings.max_records + 1))
    if len(reads) > settings.max_records:
        text = (
            f"These are more than {settings.max_records:,} examinations; send fewer at a time, or ask with "
            "`Prefer: respond-async`. None was kept."
        )
        raise answers.refusal(413, "too-long", "http-too-many-records", text)
    return reads


def is_one(reads: Sequence[Read], kind: str, body: bytes) -> bool:
    """Whether one examination was sent as one: who sends a list gets a list, also for one."""
    listed = body[:64].removeprefix(codecs.BOM_UTF8).lstrip().startswith(b"[")
    return len(reads) == 1 and BY_CONTENT_TYPE[kind] not in _SEVERAL and not listed
