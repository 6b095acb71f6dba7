"""/desk: the maps in use, the drafts, and bringing in a form."""

from __future__ import annotations

import re
from typing import Any, Final

from fastapi import APIRouter, Depends, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import RedirectResponse, Response

from fhirgallop.mapping.editing import put_part
from fhirgallop.outcome import Issue, has_errors
from fhirgallop.service import audit
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.desk.brought import gather
from fhirgallop.service.desk.desk import Begun, Desk
from fhirgallop.service.desk.dictionary import Described, is_questionnaire, read_dictionary
from fhirgallop.service.desk.forms import files, form, word
from fhirgallop.service.pages.rendering import page
from fhirgallop.storage.drafts import Sample

router = APIRouter(
    prefix="/desk", include_in_schema=False, dependencies=[Depends(needs(roles=("informatician",)))]
)

_NAME: Final = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]{0,63}")
_ADDRESS: Final = re.compile(r"https?://[^\s/]{1,150}(/[^\s]{0,40})?")
_HEADED: Final = ("oru", "questionnaire-response")


@router.get("")
def desk_page(request: Request) -> Response:
    """The desk's first page."""
    return _page(request)


@router.post("")
async def begin(request: Request) -> Response:
    """Makes a draft of what was brought in."""
    sent = await form(request)
    told = {name: word(sent, name, 200) for name in ("name", "title", "address", "zone")}
    samples, described, issues = await _brought(files(sent, "records"), files(sent, "dictionary"))
    issues += _faults(told, found=bool(samples or described))
    if has_errors(issues):
        return await run_in_threadpool(_page, request, told=told, issues=issues, status=422)
    desk: Desk = request.app.state.desk
    audit.about(request, action="C", interaction="create")
    begun = Begun(told["name"], told["title"] or told["name"], told["address"].rstrip("/"), told["zone"],
                  samples, described)  # fmt: skip
    id_ = await run_in_threadpool(_begun, desk, begun)
    return RedirectResponse(f"/desk/drafts/{id_}", 303)


@router.post("/again")
async def again(request: Request) -> Response:
    """Makes a draft of a map that is in use."""
    sent = await form(request)
    name = word(sent, "name")
    desk: Desk = request.app.state.desk
    id_ = await run_in_threadpool(_from_use, desk, name)
    if not id_:
        return await run_in_threadpool(_page, request, issues=[_NO_SUCH], status=404)
    return RedirectResponse(f"/desk/drafts/{id_}", 303)


_NO_SUCH: Final = Issue("error", "not-found", "http-unknown-map", "There is no map of that name in use.")


def _from_use(desk: Desk, name: str) -> str:
    template = desk.shelf.get(name)
    kept = desk.version(name, template.version) if template else None
    if kept is None:
        return ""
    address = kept[0].record.patient.system.rpartition("/")[0]
    return desk.begin(Begun(name, kept[0].title or name, address, kept[0].record.time.zone, text=kept[1]))


def _begun(desk: Desk, begun: Begun) -> str:
    """Keeps the draft; a form with a header of its own tells the record's parts there."""
    id_ = desk.begin(begun)
    draft = desk.drafts.find(id_)
    if draft is None:  # pragma: no cover  (it was kept a moment ago)
        raise LookupError(id_)
    records = desk.brought(draft).records
    if records and all(record.form in _HEADED for record in records):
        text = draft.text
        for what, kind in (("patient", "patients"), ("identifier", "examinations")):
            text = put_part(text, what, {"system": f"{draft.address}/{kind}"}, within="record")
        text = put_part(text, "time", {"zone": draft.zone} if draft.zone else {}, within="record")
        desk.change(draft, text, "patient, number and time are taken from the form's own header")
    return id_


async def _brought(
    sent: list[tuple[str, bytes]], dictionaries: list[tuple[str, bytes]]
) -> tuple[list[tuple[str, bytes]], list[Described], list[Issue]]:
    return await run_in_threadpool(_read, sent, dictionaries)


def _read(
    sent: list[tuple[str, bytes]], dictionaries: list[tuple[str, bytes]]
) -> tuple[list[tuple[str, bytes]], list[Described], list[Issue]]:
    """Samples, what is described, and what is wrong; a Questionnaire is a description wherever it came."""
    samples, described, issues = [], list[Described](), list[Issue]()
    for media_type, content in sent:
        if media_type.endswith("json") and is_questionnaire(content):
            dictionaries = [*dictionaries, (media_type, content)]
        else:
            samples.append((media_type, content))
    for media_type, content in dictionaries:
        rows, faults = read_dictionary(content, media_type)
        described += rows
        issues += faults
    if samples and not described:
        found = gather([Sample(0, *sample) for sample in samples], [])
        issues += found.issues if not found.records else ()
    return samples, described, issues


def _faults(told: dict[str, str], *, found: bool) -> list[Issue]:
    texts = []
    if not _NAME.fullmatch(told["name"]):
        texts.append(
            ("name", "Give the map a short name of letters, digits, dots and hyphens, without blanks.")
        )
    if not _ADDRESS.fullmatch(told["address"]):
        texts.append(("address", "Say where the clinic's numbers belong, such as https://clinic.example."))
    if not found:
        texts.append(("records", "Choose a file with sample records, or one that describes the fields."))
    return [Issue("error", "value", "desk-form", text, field=field) for field, text in texts]


def _page(
    request: Request,
    told: dict[str, str] | None = None,
    issues: list[Issue] | None = None,
    status: int = 200,
) -> Response:
    desk: Desk = request.app.state.desk
    in_use = sorted(desk.shelf.values(), key=lambda template: template.name)
    values: dict[str, Any] = {
        "drafts": desk.drafts.all(),
        "in_use": in_use,
        "of_folder": {name for name, one in desk.shelf.folder.items() if desk.shelf.get(name) is one},
        "waiting": desk.publications.waiting(),
        "told": told or {"name": "", "title": "", "address": "", "zone": ""},
        "issues": issues or [],
        "most": request.app.state.settings.max_body // (1024 * 1024),
        "keep_days": request.app.state.settings.keep_samples,
    }
    return page(request, "desk.html", status=status, **values)
