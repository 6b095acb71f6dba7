"""/desk/drafts/{id}/publish and /desk/maps/{name}: from a draft into use, and what was used when."""

from __future__ import annotations

import re
from typing import Any, Final, Literal
from urllib.parse import quote

from fastapi import APIRouter, Depends, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import RedirectResponse, Response

from fhirgallop.codes import fhirjson
from fhirgallop.mapping.editing import put_part
from fhirgallop.mapping.reading import read_map
from fhirgallop.outcome import Issue
from fhirgallop.service import audit
from fhirgallop.service.answers import FHIR_JSON, refusal
from fhirgallop.service.auth.caller import Caller
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.desk.blank_form import blank_form
from fhirgallop.service.desk.checking import check
from fhirgallop.service.desk.desk import Desk, digest
from fhirgallop.service.desk.forms import Form, form, word
from fhirgallop.service.desk.workbench import Bench
from fhirgallop.service.fhir.map_concepts import concept_map
from fhirgallop.service.pages.rendering import page
from fhirgallop.service.routes.pages_desk_draft import found
from fhirgallop.storage.drafts import Draft

router = APIRouter(
    prefix="/desk", include_in_schema=False, dependencies=[Depends(needs(roles=("informatician",)))]
)

_VERSION: Final = re.compile(r"\S{1,32}")
_SAMPLES_KEPT: Final = "keep"


@router.get("/drafts/{id_}/publish")
def publish_page(request: Request, id_: str) -> Response:
    """The check before publishing, and what publishing needs."""
    return _publish_page(request, found(request, id_))


def _publish_page(
    request: Request,
    draft: Draft,
    told: dict[str, str] | None = None,
    issues: list[Issue] | None = None,
    status: int = 200,
) -> Response:
    desk: Desk = request.app.state.desk
    audit.about(request)
    now = desk.bench(draft)
    template = now.template
    in_use = desk.shelf.get(template.name) if template else None
    checked = check(now.brought.records, template, in_use) if template else None
    values: dict[str, Any] = {
        "bench": now, "draft": draft, "checked": checked, "in_use": in_use, "issues": issues or [],
        "told": told or {"version": _next_version(desk, now), "author": "", "note": "", "samples": "delete"},
        "second_person": desk.second_person,
    }  # fmt: skip
    return page(request, "desk_publish.html", status=status, **values)


def _next_version(desk: Desk, now: Bench) -> str:
    """The version that the text states, or the next number where that one is kept already."""
    if now.template is None:
        return ""
    taken = {one.version for one in desk.maps.versions() if one.name == now.template.name}
    version = now.template.version
    if version not in taken:
        return version
    numbers = [int(one) for one in taken if one.isdecimal() and len(one) < 9]
    return str(max(numbers) + 1) if numbers else ""


@router.post("/drafts/{id_}/publish")
async def publish(request: Request, id_: str) -> Response:
    """Puts the draft into use."""
    sent = await form(request)
    return await run_in_threadpool(_published, request, id_, sent)


def _published(request: Request, id_: str, sent: Form) -> Response:
    desk: Desk = request.app.state.desk
    draft = found(request, id_)
    told = {"version": word(sent, "version", 40), "author": word(sent, "author", 200),
            "note": word(sent, "note", 2000), "samples": word(sent, "samples", 10)}  # fmt: skip
    issues = _faults(told)
    if word(sent, "step") != str(draft.step):
        issues.append(
            _issue("step", "The draft has changed since this page was made; look at the check again.")
        )
    now = desk.bench(draft)
    if issues or now.template is None:
        return _publish_page(request, draft, told, issues, 422)
    text = draft.text
    if now.template.version != told["version"]:
        text = put_part(text, "version", told["version"])
    template, _ = read_map(text)
    if template is None:
        return _publish_page(request, draft, told, [_issue("version", "That is no version of a map.")], 422)
    checked = check(now.brought.records, template, desk.shelf.get(template.name)).counts()
    _, issues = desk.publish(
        template, text, author=told["author"], key=_who(request), note=told["note"], checked=checked
    )
    if issues:
        return _publish_page(request, draft, told, issues, 409)
    audit.about(request, action="U", interaction="update")
    desk.change(draft, text, f"published as version {template.version}")
    if told["samples"] != _SAMPLES_KEPT:
        desk.delete_samples(draft.id)
    return RedirectResponse(f"/desk/maps/{quote(template.name)}", 303)


def _faults(told: dict[str, str]) -> list[Issue]:
    found_ = []
    if not _VERSION.fullmatch(told["version"]):
        found_.append(_issue("version", "Give the version a number or word without blanks."))
    if not told["author"]:
        found_.append(_issue("author", "Write your name, as it shall stand in the history."))
    if not told["note"]:
        found_.append(_issue("note", "Say in a sentence what is new, or why."))
    return found_


def _issue(field: str, text: str) -> Issue:
    return Issue("error", "value", "desk-form", text, field=field)


def _who(request: Request) -> str:
    caller: Caller = request.state.caller
    return f"{caller.kind} {caller.name}"


@router.get("/maps/{name}")
def history_page(request: Request, name: str) -> Response:
    """Every decision about a map, its versions, and what can be done with them."""
    return _history(request, name)


def _history(request: Request, name: str, wrong: str = "", status: int = 200) -> Response:
    desk: Desk = request.app.state.desk
    versions = [one for one in desk.maps.versions() if one.name == name]
    if not versions:
        raise refusal(404, "not-found", "http-unknown-map", "There is no map of that name; /desk lists them.")
    decisions = desk.publications.history(name)
    values: dict[str, Any] = {
        "name": name, "versions": versions[::-1], "decisions": decisions, "in_use": desk.shelf.get(name),
        "checks": {one.id: fhirjson.read(one.checked)[0] for one in decisions},
        "mine": digest(_who(request)), "wrong": wrong, "of_folder": desk.shelf.folder.get(name),
        "second_person": desk.second_person,
    }  # fmt: skip
    return page(request, "desk_map.html", status=status, **values)


@router.post("/maps/{name}/settle")
async def settle(request: Request, name: str) -> Response:
    """A second person approves, or declines, what waits."""
    sent = await form(request)

    def act() -> Response:
        desk: Desk = request.app.state.desk
        person = word(sent, "person", 200)
        one = next((p for p in desk.publications.history(name) if str(p.id) == word(sent, "id")), None)
        if one is None or not person:
            return _history(request, name, "Write your name, as it shall stand in the history.", 422)
        approve = word(sent, "answer") == "approve"
        if not desk.settle(one, approve=approve, person=person, key=_who(request)):
            text = "Somebody else than the author has to answer, and only once; sign in as another person."
            return _history(request, name, text, 409)
        return RedirectResponse(f"/desk/maps/{quote(name)}", 303)

    return await run_in_threadpool(act)


@router.post("/maps/{name}/back")
async def back(request: Request, name: str) -> Response:
    """Puts an earlier version into use again."""
    sent = await form(request)

    def act() -> Response:
        desk: Desk = request.app.state.desk
        author, note = word(sent, "author", 200), word(sent, "note", 2000)
        if not (author and note):
            return _history(request, name, "Write your name, and why the earlier version is put back.", 422)
        version = word(sent, "version")
        if not desk.back(name, version, author=author, key=_who(request), note=note):
            text = "That version is not kept here, or this program cannot read it any more."
            return _history(request, name, text, 409)
        return RedirectResponse(f"/desk/maps/{quote(name)}", 303)

    return await run_in_threadpool(act)


@router.get("/maps/{name}/{version}/{kind}")
def download(
    request: Request,
    name: str,
    version: str,
    kind: Literal["map.yaml", "conceptmap.json", "questionnaire.json"],
) -> Response:
    """A kept version: as it was written, as a ConceptMap, or as a Questionnaire."""
    desk: Desk = request.app.state.desk
    kept = desk.version(name, version)
    if kept is None:
        raise refusal(404, "not-found", "http-unknown-map", "That version is not kept here.")
    template, text = kept
    edition = request.app.state.settings.edition
    if kind == "map.yaml":
        body, media_type = text.encode(), "application/yaml"
    elif kind == "conceptmap.json":
        body, media_type = fhirjson.write(concept_map(template, edition)), FHIR_JSON
    else:
        body, media_type = fhirjson.write(blank_form(template, edition)), FHIR_JSON
    stem = re.sub(r"[^A-Za-z0-9._-]+", "-", f"{name}-{version}")
    headers = {"Content-Disposition": f'attachment; filename="{stem}-{kind}"'}
    return Response(body, media_type=media_type, headers=headers)
