"""POST /exams: an examination in the clinic's own words in, a coded Bundle out."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated, Any, Final

import msgspec
from fastapi import APIRouter, Query, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import Response

from fhirgallop.intake.detect import BY_CONTENT_TYPE, open_records
from fhirgallop.intake.reading import Read
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.observations.editions import Edition
from fhirgallop.outcome import Issue, operation_outcome
from fhirgallop.service import answers, requests
from fhirgallop.service.examinations import BusyError, Coded, Examinations
from fhirgallop.settings import Settings

router = APIRouter(tags=["examinations"])

_SEVERAL: Final = frozenset({"ndjson", "csv", "tsv", "workbook"})
_OUTCOME: Final = {
    "description": "An OperationOutcome says what and where.",
    "content": {answers.FHIR_JSON: {}},
}
_BODIES: Final = {kind: {"schema": {"type": "string"}} for kind in BY_CONTENT_TYPE}
_BODIES["application/json"] = {"schema": {"type": "object"}}


@dataclass(frozen=True, slots=True)
class Wish:
    """What a request asks for beside its body."""

    template: TemplateMap
    edition: Edition
    snomed: bool
    fhir: bool


@router.post(
    "/exams",
    summary="Code one examination, or several",
    description=(
        "The body is one examination (JSON object, HL7 v2 ORU^R01, FHIR QuestionnaireResponse) or several "
        "(JSON list, NDJSON, CSV, spreadsheet). One is answered with `{bundle, outcome, unread, unknown}`, "
        "or with the bare transaction Bundle where `Accept: application/fhir+json` is sent; several with one "
        "such object each, in order, and counts. The same examination sent twice gets the same Bundle; a "
        "changed one amends its resources."
    ),
    openapi_extra={"requestBody": {"required": True, "content": _BODIES}},
    responses={
        200: {"description": "Coded.", "content": {answers.PLAIN_JSON: {}, answers.FHIR_JSON: {}}},
        **dict.fromkeys((400, 404, 406, 409, 413, 415, 422), _OUTCOME),
    },
)
async def post_exams(
    request: Request,
    map: Annotated[str, Query(description="Name of a published template map.", max_length=200)],  # noqa: A002
    edition: Annotated[str | None, Query(description="R4, R4B or R5; R4 unless set otherwise.")] = None,
    snomed: Annotated[bool | None, Query(description="Write SNOMED CT codings.")] = None,
) -> Response:
    """Codes what the body holds."""
    template = request.app.state.shelf.get(map)
    if template is None:
        text = "There is no template map of that name; GET /maps lists them."
        raise answers.refusal(404, "not-found", "http-unknown-map", text)
    settings: Settings = request.app.state.settings
    wish = Wish(
        template,
        requests.edition(edition, settings.edition),
        settings.snomed if snomed is None else snomed,
        requests.wants_fhir(request),
    )
    kind = requests.content_type(request)
    body = await requests.body(request, settings.max_body)
    desk: Examinations = request.app.state.examinations
    try:
        return await run_in_threadpool(_answer, desk, body, kind, wish)
    except BusyError:
        text = "This examination is being changed by other requests; send it again."
        raise answers.refusal(409, "conflict", "exam-busy", text) from None


def _answer(desk: Examinations, body: bytes, content_type: str, wish: Wish) -> Response:
    read = list(open_records(body, content_type=content_type))
    if not read:
        raise answers.refusal(400, "required", "record-none", "The body holds no examination; send one.")
    if len(read) == 1 and BY_CONTENT_TYPE[content_type] not in _SEVERAL:
        return _one(desk, read[0], wish)
    if wish.fhir:
        text = f"Several examinations have no bare Bundle; ask for {answers.PLAIN_JSON}."
        raise answers.refusal(406, "not-supported", "http-accept-several", text)
    results = [_entry(desk, one, wish) for one in read]
    coded = sum(result["status"] == "coded" for result in results)
    return answers.json_answer({"coded": coded, "refused": len(results) - coded, "results": results})


def _one(desk: Examinations, read: Read, wish: Wish) -> Response:
    if not isinstance(read, LocalRecord):
        too_long = any(issue.code == "too-long" for issue in read.issues)
        raise answers.RefusalError(413 if too_long else 400, read.issues)
    coded = desk.code(read, wish.template, wish.edition, snomed=wish.snomed)
    if coded.bundle is None:
        raise answers.RefusalError(422, coded.result.issues)
    if wish.fhir:
        issues = {"Fhirgallop-Issues": str(len(coded.result.issues))}
        return Response(coded.bundle, media_type=answers.FHIR_JSON, headers=issues)
    return answers.json_answer(_told(coded))


def _entry(desk: Examinations, read: Read, wish: Wish) -> dict[str, Any]:
    if not isinstance(read, LocalRecord):
        return {"line": read.line, "status": "unreadable", "outcome": operation_outcome(read.issues)}
    try:
        coded = desk.code(read, wish.template, wish.edition, snomed=wish.snomed)
    except BusyError:
        busy = Issue("error", "conflict", "exam-busy", "Other requests are changing it; send it again.")
        return {"line": read.line, "status": "refused", "outcome": operation_outcome([busy])}
    status = "refused" if coded.bundle is None else "coded"
    return {"line": read.line, "status": status, **_told(coded)}


def _told(coded: Coded) -> dict[str, Any]:
    told: dict[str, Any] = {}
    if coded.bundle is not None:
        told["bundle"] = msgspec.Raw(coded.bundle)
    told["outcome"] = operation_outcome(coded.result.issues)
    told["unread"] = coded.result.unread
    told["unknown"] = [{"field": u.field, "value": u.value} for u in coded.result.unknown]
    return told
