"""Who asks, and what that caller may do."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Final, Literal

from fhirgallop.outcome import Issue
from fhirgallop.service import answers
from fhirgallop.service.auth.scopes import EVERYTHING, NO_SCOPES, NOTHING, Reach, Scopes

Kind = Literal["nobody", "stranger", "cds", "system", "person", "administrator"]

ROLES: Final = frozenset({"clinician", "informatician", "operator"})


@dataclass(frozen=True, slots=True)
class Caller:
    """One caller, as far as a request shows.

    Attributes:
        kind: `nobody` where authorisation is off (any program of this machine, and it may everything);
            `stranger` at an address that needs nothing; `cds` a CDS client; `system` the holder of an access
            token; `person` somebody signed in; `administrator` the holder of the local token.
        name: issuer, client id or subject, as the token has it; no patient's data. Empty for the first two.
        token_id: the token's own id (`jti`), empty where it has none; never the token.
        scopes: what an access token permits.
        roles: what a person, or the administrator, may.
    """

    kind: Kind
    name: str = ""
    token_id: str = ""
    scopes: Scopes = NO_SCOPES
    roles: frozenset[str] = frozenset()

    def reach(self, type_: str, does: str) -> Reach:
        """How far this caller's rights go for one type and one kind of interaction.

        `does` is c (create), r (read, vread, history of one resource), u (update, patch, upsert), d (delete)
        or s (search, history of a type or of all).

        Source: SMART App Launch 2.2, "Scopes for requesting FHIR Resources".
        """
        if self.kind == "nobody":
            return EVERYTHING
        return self.scopes.reach(type_, does) if self.kind == "system" else NOTHING

    def may(self, type_: str, does: str, resource: Mapping[str, Any] | None = None) -> bool:
        """Whether an interaction is permitted: for a resource, or without one for some resource at all."""
        reach = self.reach(type_, does)
        return not reach.nothing if resource is None else reach.admits(resource)


NOBODY: Final = Caller("nobody", roles=ROLES)
STRANGER: Final = Caller("stranger")


def forbidden() -> answers.RefusalError:
    """403 for a caller who is known and may not; says nothing of whether there is anything to be had.

    Source: RFC 6750, section 3.1 (`insufficient_scope`).
    """
    text = (
        "The token does not permit this; ask for system scopes that name the resource type and interaction."
    )
    challenge = {"WWW-Authenticate": 'Bearer error="insufficient_scope"'}
    return answers.RefusalError(403, [Issue("error", "forbidden", "auth-forbidden", text)], challenge)


def unknown(*, presented: bool) -> answers.RefusalError:
    """401, with the same words whatever was wrong with what was presented.

    Source: RFC 6750, section 3: `error` only where a token was presented.
    """
    text = "Present a valid token: Authorization: Bearer."
    challenge = 'Bearer error="invalid_token"' if presented else "Bearer"
    issue = Issue("error", "login", "auth-login", text)
    return answers.RefusalError(401, [issue], {"WWW-Authenticate": challenge})
