"""/deliveries as a page: what waits, what has failed and why; send again, or give up with a reason."""

from __future__ import annotations

from typing import Final

from fastapi import APIRouter, Depends, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import RedirectResponse, Response

from fhirgallop.service import answers
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.desk.forms import form, word
from fhirgallop.service.pages.rendering import page
from fhirgallop.service.views.deliveries import NAMES, look
from fhirgallop.storage.outbox import Outbox, State

router = APIRouter(
    prefix="/deliveries", include_in_schema=False, dependencies=[Depends(needs(roles=("operator",)))]
)

_OPEN: Final[tuple[State, ...]] = ("failed", "waiting", "sending")
_MOST_REASON: Final = 400


@router.get("")
async def list_deliveries(request: Request) -> Response:
    """How deliveries fare, and those in one state, else all that have not arrived."""
    return await run_in_threadpool(_page, request)


@router.post("/again")
async def again(request: Request) -> Response:
    """Lets one delivery that failed, or all of them, be sent again."""
    sent = await form(request)
    number = _number(word(sent, "number", 20))
    box, now = _box(request), int(request.app.state.clock().timestamp() * 1000)
    await run_in_threadpool(box.again, [number] if number else None, now)
    if not number:
        await run_in_threadpool(box.reopen, now)
    return RedirectResponse("/deliveries", 303)


@router.post("/given-up")
async def give_up(request: Request) -> Response:
    """Gives one delivery up, for a reason."""
    sent = await form(request)
    number, reason = _number(word(sent, "number", 20)), word(sent, "reason", _MOST_REASON)
    if not number or not reason:
        text = "Say why this delivery is given up: the record system never gets it."
        raise answers.refusal(422, "required", "page-delivery", text)
    await run_in_threadpool(_box(request).drop, [number], f"given up: {reason}")
    return RedirectResponse("/deliveries", 303)


def _page(request: Request) -> Response:
    asked = request.query_params.get("state", "")
    states = tuple(state for state in NAMES if state == asked) or _OPEN
    after = _number(request.query_params.get("after", "0"))
    found = look(_box(request), states, request.app.state.clock(), after=after)
    return page(
        request,
        "deliveries.html",
        found=found,
        names=NAMES,
        state=asked if asked in NAMES else "",
        delivering=request.app.state.dispatch is not None,
        most_reason=_MOST_REASON,
        first=not after,
    )


def _box(request: Request) -> Outbox:
    box: Outbox = request.app.state.outbox
    return box


def _number(text: str) -> int:
    return int(text) if text.isascii() and text.isdecimal() and len(text) < 18 else 0
