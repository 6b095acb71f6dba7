"""People who are signed in: a cookie, a session behind it, and a proof that a form is our own.

Sources: RFC 6265bis (cookies with the prefix `__Host-`); OWASP Cross-Site Request Forgery Prevention Cheat
Sheet (a token in every form that changes something).
"""

from __future__ import annotations

import asyncio
import hmac
import re
import secrets
from collections.abc import Callable
from typing import Final

from fastapi import Request
from starlette.concurrency import run_in_threadpool
from starlette.datastructures import FormData
from starlette.responses import Response

from fhirgallop.service import answers
from fhirgallop.service.auth.caller import Caller
from fhirgallop.storage.tokens import Session, Sessions

COOKIE: Final = "__Host-fhirgallop"
FORM_FIELD: Final = "form-token"
FORM_HEADER: Final = "X-Form-Token"
_SAFE: Final = frozenset({"GET", "HEAD"})
_FORM: Final = "application/x-www-form-urlencoded"
_WITH_FILES: Final = "multipart/form-data"
_MOST_FORM: Final = 256 * 1024
_MOST_FIELDS: Final = 1000
_PATIENCE: Final = 30.0
# the first part of a form with files is the proof: pages put it there
_PROOF: Final = re.compile(
    rb'--[^\r\n]{1,70}\r\nContent-Disposition: form-data; name="form-token"\r\n\r\n([0-9a-f]{64})\r\n'
)


class People:
    """Who is signed in.

    Args:
        sessions: keeps the sessions.
        clock: seconds since 1970.
        lasts: seconds that a sign-in lasts.
        secret: makes a new secret.
    """

    def __init__(
        self,
        sessions: Sessions,
        clock: Callable[[], float],
        lasts: float,
        secret: Callable[[], str] = secrets.token_urlsafe,
    ) -> None:
        self._sessions = sessions
        self._clock = clock
        self._lasts = lasts
        self._secret = secret

    async def admit(self, request: Request) -> Caller | None:
        """Whoever the browser's cookie is of; None for nobody.

        `request.state.form_token` is then what every form of the answer's page must carry.

        Raises:
            RefusalError: 403 for a request that changes something, and that no page of ours made.
            StorageError: the database failed.
        """
        secret = request.cookies.get(COOKIE, "")
        if not secret:
            return None
        session = await run_in_threadpool(self._sessions.find, secret, now=self._clock())
        if session is None:
            return None
        token = _form_token(secret)
        if request.method not in _SAFE and not hmac.compare_digest(await _sent(request), token.encode()):
            text = "This did not come from a page of this service, or the page is old; load it again."
            raise answers.refusal(403, "forbidden", "auth-form", text)
        request.state.form_token = token
        return Caller("person", session.subject, roles=session.roles)

    def begin(self, subject: str, roles: frozenset[str], answer: Response) -> None:
        """Signs somebody in: the answer carries the cookie.

        Raises:
            StorageError: the database failed.
        """
        secret, now = self._secret(), self._clock()
        self._sessions.begin(secret, Session(subject, roles, now + self._lasts), now=now)
        set_cookie(answer, COOKIE, secret, int(self._lasts))

    def end(self, request: Request, answer: Response) -> None:
        """Signs out whoever the cookie is of.

        Raises:
            StorageError: the database failed.
        """
        if secret := request.cookies.get(COOKIE, ""):
            self._sessions.end(secret)
        set_cookie(answer, COOKIE, "", 0)


def set_cookie(answer: Response, name: str, value: str, seconds: int) -> None:
    """A cookie for this host alone, over TLS alone, that no script reads and no other site sends."""
    answer.set_cookie(name, value, max_age=seconds, path="/", secure=True, httponly=True, samesite="lax")


def _form_token(secret: str) -> str:
    return hmac.digest(secret.encode("utf-8", "replace"), b"form", "sha256").hex()


async def small_form(request: Request) -> FormData:
    """The fields of a form of ours; none where the body is no form, too large, or does not say how large.

    The request keeps its body, so that whoever comes after may read it once more.

    Raises:
        RefusalError: 408.
    """
    kind = _kind(request)
    length = request.headers.get("content-length", "")
    if kind != _FORM or not length.isdecimal() or int(length) > _MOST_FORM:
        return FormData()
    try:
        async with asyncio.timeout(_PATIENCE):
            await request.body()
    except TimeoutError:
        text = "The form took too long to arrive; send it again."
        raise answers.refusal(408, "timeout", "http-too-slow", text) from None
    return await request.form(max_fields=_MOST_FIELDS, max_files=0)


async def _sent(request: Request) -> bytes:
    """The proof that a request carries, in its form or in a header."""
    value: object = request.headers.get(FORM_HEADER)
    if value is None and _kind(request) == _WITH_FILES:
        value = await _in_multipart(request)
    if value is None:
        value = (await small_form(request)).get(FORM_FIELD, "")
    return value.encode("utf-8", "replace") if isinstance(value, str) else b""


async def _in_multipart(request: Request) -> str:
    """The proof in a form with files, where it stands before these; the request keeps its body."""
    length = request.headers.get("content-length", "")
    most = request.app.state.settings.max_body
    if not length.isdecimal() or int(length) > most:
        return ""
    try:
        async with asyncio.timeout(_PATIENCE):
            content = await request.body()
    except TimeoutError:
        return ""
    found = _PROOF.match(content)
    return found[1].decode() if found else ""


def _kind(request: Request) -> str:
    return request.headers.get("content-type", "").partition(";")[0].strip().lower()
