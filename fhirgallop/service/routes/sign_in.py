"""Signing in and out: with the site's OpenID Connect provider, or with the administrators' token."""

from __future__ import annotations

import logging
import secrets
from html import escape
from typing import Final

from fastapi import APIRouter, Depends, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import HTMLResponse, RedirectResponse, Response

from fhirgallop.service import answers
from fhirgallop.service.auth.caller import Caller, unknown
from fhirgallop.service.auth.gate import Gate
from fhirgallop.service.auth.jwt import TokenError
from fhirgallop.service.auth.keys import UnreachableError
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.auth.openid import SignIn
from fhirgallop.service.auth.opening import SIGNED_IN
from fhirgallop.service.auth.people import FORM_FIELD, set_cookie, small_form
from fhirgallop.settings import Settings

log: Final = logging.getLogger("fhirgallop.service")

router = APIRouter(include_in_schema=False)

_HALFWAY: Final = "__Host-fhirgallop-halfway"
_HALFWAY_SECONDS: Final = 600
_ALL: Final = ("clinician", "informatician", "operator")
Open = Depends(needs(open=True))
Anybody = Depends(needs(roles=_ALL))


@router.get("/sign-in", dependencies=[Open])
async def page(request: Request) -> Response:
    """How to sign in; for somebody who is, who that is and how to sign out."""
    gate: Gate = request.app.state.gate
    person = await gate.people.admit(request)
    if person:
        return _page(_signed_in(person, request.state.form_token))
    settings: Settings = request.app.state.settings
    parts = []
    if gate.sign_in:
        parts.append('<p><a href="/sign-in/start">Sign in with the account of your house</a></p>')
    if settings.admin_token:
        parts.append(
            '<form method="post" action="/sign-in"><p><label>Administrators\' token '
            '<input type="password" name="token" autocomplete="off" required></label> '
            "<button>Sign in</button></p></form>"
        )
    return _page("".join(parts) or "<p>Nobody can sign in here: no way is set.</p>")


@router.post("/sign-in", dependencies=[Open])
async def by_token(request: Request) -> Response:
    """Signs in with the administrators' token."""
    gate: Gate = request.app.state.gate
    token = (await small_form(request)).get("token", "")
    address = request.client.host if request.client else ""
    caller = gate.administrators.admit(token, address) if isinstance(token, str) and token else None
    if caller is None:
        raise unknown(presented=bool(token))
    answer = _to("/sign-in")
    await run_in_threadpool(gate.people.begin, caller.name, caller.roles, answer)
    return answer


@router.get("/sign-in/start", dependencies=[Open])
async def start(request: Request) -> Response:
    """Sends the browser to the provider."""
    desk = _desk(request)
    secret = secrets.token_urlsafe()
    try:
        answer = _to(await run_in_threadpool(desk.begin, secret))
    except UnreachableError:
        raise _unreachable() from None
    set_cookie(answer, _HALFWAY, secret, _HALFWAY_SECONDS)
    return answer


@router.get(SIGNED_IN, dependencies=[Open])
async def end(request: Request) -> Response:
    """Takes the browser back from the provider."""
    desk, gate = _desk(request), request.app.state.gate
    halfway = request.cookies.get(_HALFWAY, "")
    try:
        person = await run_in_threadpool(desk.end, halfway, dict(request.query_params))
    except TokenError as error:
        log.info("sign-in refused: %s", error)
        text = "You were not signed in, or have no role here; start again, or ask the operator."
        raise answers.refusal(403, "login", "auth-sign-in", text) from None
    except UnreachableError:
        raise _unreachable() from None
    answer = _to("/sign-in")
    await run_in_threadpool(gate.people.begin, person.subject, person.roles, answer)
    set_cookie(answer, _HALFWAY, "", 0)
    return answer


@router.post("/sign-out", dependencies=[Anybody])
async def sign_out(request: Request) -> Response:
    """Ends the session."""
    gate: Gate = request.app.state.gate
    answer = _to("/sign-in")
    await run_in_threadpool(gate.people.end, request, answer)
    return answer


def _desk(request: Request) -> SignIn:
    gate: Gate = request.app.state.gate
    if gate.sign_in is None:
        raise answers.refusal(404, "not-found", "auth-no-sign-in", "No sign-in provider is set here.")
    return gate.sign_in


def _unreachable() -> answers.RefusalError:
    text = "The sign-in provider does not answer as it should; try again later."
    return answers.refusal(503, "transient", "auth-unreachable", text)


def _to(address: str) -> RedirectResponse:
    return RedirectResponse(address, 303)


def _signed_in(person: Caller, form_token: str) -> str:
    roles = escape(", ".join(sorted(person.roles)))
    return (
        f"<p>You are signed in as {roles}.</p>"
        '<form method="post" action="/sign-out">'
        f'<input type="hidden" name="{FORM_FIELD}" value="{escape(form_token)}">'
        "<p><button>Sign out</button></p></form>"
    )


def _page(body: str) -> Response:
    return HTMLResponse(
        '<!doctype html><html lang="en"><head><meta charset="utf-8"><title>fhirgallop: sign in</title>'
        '<meta name="viewport" content="width=device-width"><link rel="stylesheet" href="/style.css"></head>'
        f"<body><main><h1>fhirgallop</h1>{body}</main></body></html>"
    )
