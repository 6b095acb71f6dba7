"""CDS Hooks clients: the tokens they sign themselves, one a call.

Source: CDS Hooks 2.0.1, "Trusting CDS Clients". A client is known by its `iss`; its keys stand where the
settings say. A token is good for one address, once, for minutes.
"""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass
from typing import Final

from fhirgallop.service.auth.caller import Caller
from fhirgallop.service.auth.jwt import (
    Token,
    TokenError,
    audiences_of,
    check_times,
    moment_of,
    read_token,
    text_of,
)
from fhirgallop.service.auth.keys import Keys
from fhirgallop.storage.tokens import UsedTokens

_LONGEST_ID: Final = 255


@dataclass(frozen=True, slots=True)
class CdsRules:
    """What a site asks of its clients' tokens.

    Attributes:
        clients: where the keys of each `iss` stand: addresses (a `jku` must be one of them) and files.
        algorithms: signatures that are taken.
        longest: seconds from `iat` to `exp` at most.
        skew: seconds that clocks may differ by.
    """

    clients: Mapping[str, tuple[str, ...]]
    algorithms: Collection[str]
    longest: float
    skew: float


class CdsClients:
    """Lets CDS clients in."""

    def __init__(self, rules: CdsRules, keys: Keys, used: UsedTokens, clock: Callable[[], float]) -> None:
        self._rules = rules
        self._keys = keys
        self._used = used
        self._clock = clock

    def admit(self, text: str, address: str) -> Caller:
        """The client that calls an address with this token.

        Args:
            text: the token.
            address: what it must be made out for: the very address that is called.

        Raises:
            TokenError: it is not taken.
            UnreachableError: the client's keys cannot be had at the moment.
            StorageError: whether it was used before cannot be told.
        """
        rules, now = self._rules, self._clock()
        token = read_token(text, rules.algorithms)
        issuer, id_ = text_of(token.claims, "iss"), text_of(token.claims, "jti")
        if issuer not in rules.clients:
            raise TokenError("iss")
        ends = self._check(token, address, now)
        token.verify(self._keys.find(token, self._places(token, issuer)))
        # last of all, so that nobody but the client can use its ids up
        if not self._used.add(issuer, id_, until=ends + rules.skew, now=now):
            raise TokenError("used before")
        return Caller("cds", issuer, id_)

    def _check(self, token: Token, address: str, now: float) -> float:
        """Everything that can be told without a key."""
        claims, rules = token.claims, self._rules
        if text_of(token.header, "typ").upper() != "JWT" or not text_of(token.header, "kid"):
            raise TokenError("header")
        if address not in audiences_of(claims):
            raise TokenError("aud")
        ends = check_times(claims, now, rules.skew)
        issued = moment_of(claims, "iat")
        if issued is None or not 0 < ends - issued <= rules.longest:
            raise TokenError("lifetime")
        if not 0 < len(text_of(claims, "jti")) <= _LONGEST_ID:
            raise TokenError("jti")
        return ends

    def _places(self, token: Token, issuer: str) -> tuple[str, ...]:
        known = self._rules.clients[issuer]
        if "jku" not in token.header:
            return known
        jku = text_of(token.header, "jku")
        if jku not in known or "://" not in jku:
            raise TokenError("jku")
        return (jku,)
