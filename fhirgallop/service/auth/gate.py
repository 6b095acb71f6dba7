"""Lets callers in: from what a request presents to a Caller, by what the address needs."""

from __future__ import annotations

import logging
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

from fastapi import Request
from starlette.concurrency import run_in_threadpool

from fhirgallop.delivery.client import Client
from fhirgallop.outcome import Issue
from fhirgallop.service import answers
from fhirgallop.service.auth.access import AccessTokens
from fhirgallop.service.auth.admin import Administrators
from fhirgallop.service.auth.caller import NOBODY, Caller, forbidden, unknown
from fhirgallop.service.auth.cds import CdsClients
from fhirgallop.service.auth.jwt import TokenError
from fhirgallop.service.auth.keys import UnreachableError
from fhirgallop.service.auth.needs import Need
from fhirgallop.service.auth.openid import SignIn
from fhirgallop.service.auth.people import People
from fhirgallop.service.limits import admit_caller

_DOTS_OF_JWT: Final = 2

log: Final = logging.getLogger("fhirgallop.service")


@dataclass(frozen=True, slots=True)
class Gate:
    """The ways in that the settings open; a way that is not there lets nobody in.

    Attributes:
        closed: False where authorisation is off, and everybody is let in.
        address: the address of the service, which tokens are made out for; no slash at its end.
        cds: CDS clients.
        tokens: holders of access tokens.
        administrators: holders of the local token.
        people: who is signed in.
        sign_in: how people sign in with the site's provider.
        clients: what all of these speak to others with.
    """

    closed: bool
    address: str
    cds: CdsClients | None
    tokens: AccessTokens | None
    administrators: Administrators
    people: People
    sign_in: SignIn | None
    clients: Sequence[Client]

    def close(self) -> None:
        """Closes the connections to others."""
        for client in self.clients:
            client.close()

    async def admit(self, request: Request, need: Need) -> Caller:
        """The caller.

        Raises:
            RefusalError: 401 where nothing valid was presented, 403 where it is not enough; 429; 503.
            StorageError: the database failed.
        """
        if not self.closed:
            return NOBODY
        text = _presented(request)
        if text:
            caller = await self._by_token(request, need, text)
        elif need.roles:
            caller = await self.people.admit(request)
        else:
            caller = None
        if caller is None:
            raise unknown(presented=bool(text))
        admit_caller(request, caller.name)
        _enough(caller, need, request)
        return caller

    async def _by_token(self, request: Request, need: Need, text: str) -> Caller | None:
        wants_access = need.token or need.does
        if self.tokens and wants_access and (known := self.tokens.known(text)):
            return known
        try:
            # keys are fetched, databases written to
            return await run_in_threadpool(self._proven, request, need, text)
        except TokenError as error:
            log.info("token refused: %s", error)
            return None
        except UnreachableError:
            log.warning("a token could not be proven: whoever keeps the keys does not answer")
            text = "Whether the token is good cannot be told at the moment; ask again later."
            issue = Issue("error", "transient", "auth-unreachable", text)
            raise answers.RefusalError(503, [issue], {"Retry-After": "10"}) from None

    def _proven(self, request: Request, need: Need, text: str) -> Caller | None:
        # a JWT is never the local token; anything else may be, and is not shown to others before it is told
        if not need.roles or text.count(".") == _DOTS_OF_JWT:
            return self._signed(request, need, text)
        address = request.client.host if request.client else ""
        brake = self.administrators.brake
        brake.check(address)
        found = self.administrators.known(text)
        try:
            found = found or self._signed(request, need, text)
        except TokenError:
            brake.failed(address)
            raise
        if found is None:
            brake.failed(address)
        return found

    def _signed(self, request: Request, need: Need, text: str) -> Caller | None:
        if self.tokens and (need.token or need.does):
            return self.tokens.admit(text)
        if self.cds and need.cds:
            return self.cds.admit(text, self.address + request.scope["path"])
        return None


def _presented(request: Request) -> str:
    """The bearer token of a request (RFC 6750, section 2.1); the only place where one is taken from."""
    given = request.headers.getlist("authorization")
    if len(given) > 1:
        raise unknown(presented=True)
    scheme, _, text = (given[0] if given else "").partition(" ")
    return text.strip() if scheme.lower() == "bearer" else ""


def _enough(caller: Caller, need: Need, request: Request) -> None:
    """Whether a caller who is known may use the address.

    Raises:
        RefusalError: 403.
    """
    if caller.roles & need.roles or (caller.kind == "cds" and need.cds):
        return
    if caller.kind == "system":
        if need.token:
            return
        reaches = [caller.reach(type_, does) for type_ in need.types(request) for does in need.does]
        # where the address names the type, what is asked for is held against a granular scope one by one
        if reaches and all(reach.everything if need.to else not reach.nothing for reach in reaches):
            return
    raise forbidden()
