"""What an address needs of its caller, said beside the route: `dependencies=[Depends(needs(...))]`."""

from __future__ import annotations

from collections.abc import Awaitable, Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

from fastapi import Request

from fhirgallop.service.auth.caller import ROLES, STRANGER

if TYPE_CHECKING:
    from fhirgallop.service.auth.gate import Gate

_TYPE: Final = "resource_type"


@dataclass(frozen=True, slots=True)
class Need:
    """The ways in to one address; any one of them is enough.

    Attributes:
        open: nothing is needed: no patient's data are to be had.
        cds: a CDS client's own token for this very address.
        token: any valid access token.
        does: letters of SMART scopes that an access token must have, all of them ...
        to: ... for each of these types, without a restriction, for they are written together; none: for the
            type that the address names, and its handler minds the restrictions.
        roles: a person, or the administrator, with one of these.
    """

    open: bool = False
    cds: bool = False
    token: bool = False
    does: str = ""
    to: tuple[str, ...] = ()
    roles: frozenset[str] = frozenset()

    async def __call__(self, request: Request) -> None:
        """Puts the caller into `request.state.caller`, or refuses the request.

        Raises:
            RefusalError: 401 or 403.
        """
        request.state.need = self  # what is audited depends on it
        if self.open:
            request.state.caller = STRANGER
            return
        gate: Gate = request.app.state.gate
        request.state.caller = await gate.admit(request, self)

    def types(self, request: Request) -> tuple[str, ...]:
        """The types that the scopes have to name; none where no scope is asked for."""
        return self.to or ((request.path_params[_TYPE],) if self.does else ())


def needs(
    *,
    open: bool = False,  # noqa: A002 - the word for it
    cds: bool = False,
    token: bool = False,
    does: str = "",
    to: tuple[str, ...] = (),
    roles: tuple[str, ...] = (),
) -> Callable[[Request], Awaitable[None]]:
    """What an address needs; see Need. Used as `Depends(needs(...))`.

    Raises:
        ValueError: it needs nothing and is not said to be open, or names no such letter or role.
    """
    if open == bool(cds or token or does or roles):
        raise ValueError("an address is either open, or names a way in")
    if set(does) - set("cruds") or (to and not does):
        raise ValueError("does is made of the letters c, r, u, d and s, and goes before to")
    if set(roles) - ROLES:
        raise ValueError(f"the roles are {', '.join(sorted(ROLES))}")
    return Need(open, cds, token, does, to, frozenset(roles))
