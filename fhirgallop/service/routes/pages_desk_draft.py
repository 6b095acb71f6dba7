"""/desk/drafts/{id}: the bench where a form's fields are mapped, tried and looked over."""

from __future__ import annotations

from typing import Any, Final
from urllib.parse import urlencode

from fastapi import APIRouter, Depends, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import RedirectResponse, Response

from fhirgallop.errors import MapError
from fhirgallop.exam import catalogue
from fhirgallop.reasoning import rulebook
from fhirgallop.service import audit
from fhirgallop.service.answers import refusal
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.desk import asked
from fhirgallop.service.desk.checking import check
from fhirgallop.service.desk.desk import Desk
from fhirgallop.service.desk.forms import Form, Sent, files, form, word
from fhirgallop.service.desk.trial import Tried, held, tried
from fhirgallop.service.desk.workbench import PAGE, PARTS, Bench, properties
from fhirgallop.service.pages.rendering import page
from fhirgallop.storage.drafts import Draft

router = APIRouter(
    prefix="/desk/drafts/{id_}",
    include_in_schema=False,
    dependencies=[Depends(needs(roles=("informatician",)))],
)

_SHOWS: Final = ("open", "mapped", "ignored", "all")
_PANES: Final = ("try", "text")
_MOVED: Final = "Somebody else has changed this draft meanwhile; it is shown as it stands now."


def found(request: Request, id_: str) -> Draft:
    """The draft of that id.

    Raises:
        RefusalError: 404.
        StorageError: the database failed.
    """
    draft = request.app.state.desk.drafts.find(id_)
    if draft is None:
        raise refusal(404, "not-found", "desk-no-draft", "There is no such draft; /desk lists what there is.")
    assert isinstance(draft, Draft)  # noqa: S101 - app.state has no types
    return draft


@router.get("")
def bench_page(
    request: Request,
    id_: str,
) -> Response:
    """The bench."""
    draft = found(request, id_)
    desk: Desk = request.app.state.desk
    audit.about(request)
    query = request.query_params
    now, said = desk.bench(draft, word(query, "field")), word(query, "said")
    where = _where(query)
    return _bench(
        request, now, where, said=_MOVED if said == "moved" else draft.did if said == "done" else ""
    )


def _bench(
    request: Request,
    now: Bench,
    where: dict[str, Any],
    *,
    said: str = "",
    wrong: str = "",
    text: str | None = None,
    status: int = 200,
) -> Response:
    shown = now.shown(where["show"], where["find"])
    records = now.brought.records
    where = {**where, "record": min(where["record"], max(len(records), 1))}
    chosen = now.chosen.name if now.chosen else ""

    def link(**changed: Any) -> str:
        query = {**where, "field": chosen, **changed}
        return "?" + urlencode({key: value for key, value in query.items() if value not in ("", 0)})

    values: dict[str, Any] = {
        "bench": now, "draft": now.draft, "where": where, "link": link, "said": said, "wrong": wrong,
        "shown": shown[where["start"] : where["start"] + PAGE], "shown_all": len(shown), "size": PAGE,
        "findings": catalogue.load().findings.values(), "parts": PARTS, "properties": properties,
        "next_open": now.after(chosen), "text": now.draft.text if text is None else text,
        "tried": _tried(request, now, where) if where["pane"] == "try" else None,
        "raw": held(records[where["record"] - 1]) if records else (),
    }  # fmt: skip
    return page(request, "desk_draft.html", status=status, **values)


def _tried(request: Request, now: Bench, where: dict[str, Any]) -> Tried | None:
    if now.template is None or not now.brought.records:
        return None
    state = request.app.state
    return tried(
        now.brought.records[where["record"] - 1], now.template, now=state.desk.now(),
        edition=state.settings.edition, snomed=state.settings.snomed, rules=rulebook.load(),
        policy=state.policy,
    )  # fmt: skip


@router.post("/change")
async def change(request: Request, id_: str) -> Response:
    """One change to one field, or to the text; then the bench again."""
    sent = await form(request)
    return await run_in_threadpool(_changed, request, id_, sent)


def _changed(request: Request, id_: str, sent: Form) -> Response:
    desk: Desk = request.app.state.desk
    draft = found(request, id_)
    audit.about(request, action="U", interaction="update")
    name = word(sent, "field")
    where = _where(sent)
    if word(sent, "step") != str(draft.step):
        return _again(id_, {**where, "field": name, "said": "moved"})
    now = desk.bench(draft, name)
    try:
        done = asked.done(now, sent)
    except (MapError, asked.AskedError) as error:
        wrong = error.issues[0].text if isinstance(error, MapError) else str(error)
        return _bench(request, now, where, wrong=wrong, text=_text(sent), status=422)
    moved = desk.change(draft, done.text, done.did)
    after = {**where, "field": name, "said": "done" if moved else "moved"}
    if moved and done.go_on:
        after["field"] = _next(desk, id_, name)
        after["start"] = 0
    return _again(id_, after)


def _next(desk: Desk, id_: str, name: str) -> str:
    """The next open field, unless something of this one is still to be told."""
    draft = desk.drafts.find(id_)
    now = desk.bench(draft, name) if draft else None
    if now is None or any(meant.open for meant in now.meant):
        return name
    return now.after(name) or name


def _text(sent: Form) -> str | None:
    return sent.get("text")


def _where(sent: Sent) -> dict[str, Any]:
    record, start = word(sent, "record", 10), word(sent, "start", 10)
    show, pane = word(sent, "show", 20), word(sent, "pane", 20)
    return {
        "show": show if show in _SHOWS else "open", "pane": pane if pane in _PANES else "try",
        "find": word(sent, "find", 100), "record": int(record) if record.isdecimal() and int(record) else 1,
        "start": int(start) if start.isdecimal() else 0,
    }  # fmt: skip


def _again(id_: str, where: dict[str, Any]) -> Response:
    query = urlencode({key: value for key, value in where.items() if value not in ("", 0)})
    return RedirectResponse(f"/desk/drafts/{id_}?{query}", 303)


@router.post("/undo")
async def undo(request: Request, id_: str) -> Response:
    """A step back, or, where the form says so, forth again."""
    sent = await form(request)

    def move() -> bool:
        desk: Desk = request.app.state.desk
        draft = found(request, id_)
        same = word(sent, "step") == str(draft.step)
        return same and desk.move(draft, 1 if word(sent, "way") == "forth" else -1)

    moved = await run_in_threadpool(move)
    return _again(id_, {**_where(sent), "field": word(sent, "field"), "said": "" if moved else "moved"})


@router.post("/samples")
async def samples(request: Request, id_: str) -> Response:
    """Adds sample records, or deletes them all."""
    sent = await form(request)
    added = files(sent, "records")

    def act() -> None:
        desk: Desk = request.app.state.desk
        draft = found(request, id_)
        audit.about(request, action="U", interaction="update")
        if word(sent, "do") == "delete":
            desk.delete_samples(draft.id)
        else:
            desk.add_samples(draft, added)

    await run_in_threadpool(act)
    return _again(id_, {})


@router.post("/delete")
async def delete(request: Request, id_: str) -> Response:
    """Deletes the draft and its sample records."""
    await form(request)

    def act() -> None:
        draft = found(request, id_)
        audit.about(request, action="D", interaction="delete")
        request.app.state.desk.delete(draft.id)

    await run_in_threadpool(act)
    return RedirectResponse("/desk", 303)


@router.get("/coverage")
def coverage(request: Request, id_: str) -> Response:
    """How well the draft fits all its sample records, and what it would change."""
    draft = found(request, id_)
    desk: Desk = request.app.state.desk
    audit.about(request)
    now = desk.bench(draft)
    in_use = desk.shelf.get(now.template.name) if now.template else None
    checked = check(now.brought.records, now.template, in_use) if now.template else None
    return page(request, "desk_coverage.html", bench=now, draft=draft, checked=checked, in_use=in_use)
