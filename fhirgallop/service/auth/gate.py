"""Lets callers in: from what a request presents to a Caller, by what the address needs."""

from __future__ import annotations

from fastapi import Request

from fhirgallop.service.auth.caller import NOBODY, Caller
from fhirgallop.service.auth.needs import Need


class Gate:
    """The ways in that the settings open; without any, authorisation is off and everybody is let in."""

    async def admit(self, request: Request, need: Need) -> Caller:
        """The caller.

        Raises:
            RefusalError: 401 where nothing valid was presented, 403 where it is not enough.
        """
        return NOBODY
