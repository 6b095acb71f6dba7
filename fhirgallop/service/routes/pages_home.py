"""/: where to go, and what runs here."""

from __future__ import annotations

from fastapi import APIRouter, Depends, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import Response

from fhirgallop.cards.safety import SAFETY_TEXTS
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.pages.rendering import page

router = APIRouter(include_in_schema=False)


@router.get("/", dependencies=[Depends(needs(roles=("clinician", "informatician", "operator")))])
async def home(request: Request) -> Response:
    """The start page, by role."""
    return await run_in_threadpool(_home, request)


def _home(request: Request) -> Response:
    state = request.app.state
    caller = request.state.caller
    tally = state.outbox.tally() if "operator" in caller.roles else None
    return page(
        request,
        "home.html",
        roles=caller.roles,
        maps=sorted(state.shelf.values(), key=lambda one: one.name),
        edition=state.settings.edition,
        rules=len(state.hooks.rules.rules),
        rules_version=state.hooks.rules.version,
        shadow=state.policy.shadow,
        delivering=state.dispatch is not None,
        tally=tally,
        safety=SAFETY_TEXTS,
    )
