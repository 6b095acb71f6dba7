"""POST /exams: an examination in the clinic's own words in, a coded Bundle out."""

from __future__ import annotations

import codecs
from collections.abc import Iterator
from dataclasses import dataclass, replace
from itertools import islice
from typing import Annotated, Any, Final

import msgspec
from fastapi import APIRouter, Depends, Query, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import Response

from fhirgallop.intake.detect import BY_CONTENT_TYPE, open_records
from fhirgallop.intake.limits import DEFAULT
from fhirgallop.intake.reading import Read
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.observations.editions import Edition
from fhirgallop.outcome import Issue, has_errors, operation_outcome
from fhirgallop.service import answers, requests
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.examinations import BusyError, Coded, Examinations
from fhirgallop.service.guard import STORAGE_FAILED
from fhirgallop.settings import Settings
from fhirgallop.storage.submissions import StorageError

router = APIRouter(tags=["examinations"])

# types of the resources that an examination becomes: new ones are created, changed ones updated
_WRITTEN: Final = ("Observation", "DiagnosticReport", "Provenance")
_SEVERAL: Final = frozenset({"ndjson", "csv", "tsv", "workbook"})
_STATUSES: Final[dict[int | str, dict[str, Any]]] = {
    200: {"description": "Coded.", "content": {answers.PLAIN_JSON: {}, answers.FHIR_JSON: {}}},
    400: answers.told("The body, or a parameter, is malformed."),
    404: answers.told("There is no map of that name."),
    406: answers.told("Nothing acceptable can be answered."),
    408: answers.told("The body took too long to arrive."),
    409: answers.told("Other requests are changing this examination."),
    413: answers.told("The body is too large, too deep, or holds too many examinations."),
    415: answers.told("The kind of body is not read here."),
    422: answers.told("The record cannot be coded by this map."),
    503: answers.told("The examination could not be stored; send it again later."),
    **answers.REFUSALS,
}
_BODIES: Final = {kind: {"schema": {"type": "string"}} for kind in BY_CONTENT_TYPE}
_BODIES["application/json"] = {"schema": {"type": "object"}}
_BUSY: Final = Issue(
    "error", "conflict", "exam-busy", "This examination is being changed by other requests; send it again."
)


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
        "or with the bare transaction Bundle where `Accept: application/fhir+json` is sent (the header "
        "`Fhirgallop-Issues` then counts the issues). A list, a table or NDJSON is answered with `{coded, "
        "refused, results}`: one such object a record, in order, with its `status` (coded, refused, "
        "unreadable, not-stored). The same examination sent twice gets the same Bundle; a changed one amends "
        "its resources."
    ),
    openapi_extra={"requestBody": {"required": True, "content": _BODIES}},
    dependencies=[Depends(needs(does="cu", to=_WRITTEN))],
    responses=_STATUSES,
)
async def post_exams(
    request: Request,
    map: Annotated[str, Query(description="Name of a published template map.", max_length=200)],  # noqa: A002
    edition: Annotated[Edition | None, Query(description="FHIR edition; R4 unless set otherwise.")] = None,
    snomed: Annotated[bool | None, Query(description="Write SNOMED CT codings.")] = None,
) -> Response:
    """Codes what the body holds."""
    requests.only_known(request, ("map", "edition", "snomed"))
    template = request.app.state.shelf.get(map)
    if template is None:
        text = "There is no template map of that name; GET /maps lists them."
        raise answers.refusal(404, "not-found", "http-unknown-map", text)
    settings: Settings = request.app.state.settings
    wish = Wish(
        template,
        edition or settings.edition,
        settings.snomed if snomed is None else snomed,
        requests.wants_fhir(request),
    )
    kind = requests.content_type(request)
    body = await requests.body(request, settings.max_body)
    desk: Examinations = request.app.state.examinations
    try:
        return await run_in_threadpool(_answer, desk, body, kind, wish, settings)
    except BusyError:
        raise answers.RefusalError(409, [_BUSY]) from None


def _answer(desk: Examinations, body: bytes, content_type: str, wish: Wish, settings: Settings) -> Response:
    limits = replace(DEFAULT, depth=settings.max_depth)
    reads = list(
        islice(open_records(body, content_type=content_type, limits=limits), settings.max_records + 1)
    )
    if len(reads) > settings.max_records:
        text = (
            f"These are more than {settings.max_records:,} examinations; send fewer at a time. None was kept."
        )
        raise answers.refusal(413, "too-long", "http-too-many-records", text)
    if not any(isinstance(read, LocalRecord) for read in reads):
        raise _unreadable([issue for read in reads for issue in read.issues])
    if len(reads) == 1 and BY_CONTENT_TYPE[content_type] not in _SEVERAL and not _is_list(body):
        return _one(desk, reads[0], wish)
    if wish.fhir:
        text = f"Several examinations have no bare Bundle; ask for {answers.PLAIN_JSON}."
        raise answers.refusal(406, "not-supported", "http-accept-several", text)
    results = list(_each(desk, reads, wish))
    coded = sum(result["status"] == "coded" for result in results)
    return answers.json_answer({"coded": coded, "refused": len(results) - coded, "results": results})


def _is_list(body: bytes) -> bool:
    """Whether several may be meant: who sends a list gets a list, also for one."""
    return body[:64].removeprefix(codecs.BOM_UTF8).lstrip().startswith(b"[")


def _unreadable(issues: list[Issue]) -> answers.RefusalError:
    if not has_errors(issues):
        issues = [
            Issue("error", "required", "record-none", "The body holds no examination; send one."),
            *issues,
        ]
    too_long = any(issue.code == "too-long" and issue.is_error for issue in issues)
    return answers.RefusalError(413 if too_long else 400, issues)


def _one(desk: Examinations, read: Read, wish: Wish) -> Response:
    assert isinstance(read, LocalRecord)  # noqa: S101 - the caller made sure
    coded = desk.code(read, wish.template, wish.edition, snomed=wish.snomed)
    if coded.bundle is None:
        raise answers.RefusalError(422, coded.result.issues)
    if wish.fhir:
        issues = {"Fhirgallop-Issues": str(len(coded.result.issues))}
        return Response(coded.bundle, media_type=answers.FHIR_JSON, headers=issues)
    return answers.json_answer(_told(coded))


def _each(desk: Examinations, reads: list[Read], wish: Wish) -> Iterator[dict[str, Any]]:
    """A result a record; after the database has failed once, no other record waits for it."""
    failed = False
    for read in reads:
        if not isinstance(read, LocalRecord):
            yield {"line": read.line, "status": "unreadable", "outcome": operation_outcome(read.issues)}
            continue
        issue = STORAGE_FAILED
        try:
            coded = None if failed else desk.code(read, wish.template, wish.edition, snomed=wish.snomed)
        except BusyError:
            coded, issue = None, _BUSY
        except StorageError:
            coded, failed = None, True
        if coded is None:
            yield {"line": read.line, "status": "not-stored", "outcome": operation_outcome([issue])}
        else:
            yield {"line": read.line, "status": "coded" if coded.bundle else "refused", **_told(coded)}


def _told(coded: Coded) -> dict[str, Any]:
    told: dict[str, Any] = {}
    if coded.bundle is not None:
        told["bundle"] = msgspec.Raw(coded.bundle)
    told["outcome"] = operation_outcome(coded.result.issues)
    told["unread"] = coded.result.unread
    told["unknown"] = [{"field": u.field, "value": u.value} for u in coded.result.unknown]
    return told
