"""Access tokens of the site's authorisation server: who holds one, and what its scopes permit.

Sources: SMART App Launch 2.2, "Backend Services" and "Token Introspection"; RFC 9068 (JWT access tokens),
RFC 7662 (introspection). What was found of a token is kept for some minutes, under its digest.
"""

from __future__ import annotations

import base64
import hashlib
import logging
import threading
from collections import OrderedDict
from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass
from typing import Any, Final, Protocol
from urllib.parse import quote, urlencode

from fhirgallop.codes import fhirjson
from fhirgallop.delivery.client import Client, ClientError
from fhirgallop.outcome import has_errors
from fhirgallop.service.auth.caller import Caller
from fhirgallop.service.auth.jwt import TokenError, audiences_of, check_times, read_token, text_of
from fhirgallop.service.auth.keys import Keys, UnreachableError
from fhirgallop.service.auth.scopes import read_scopes

log: Final = logging.getLogger("fhirgallop.service")

_MOST_KEPT: Final = 2000
_KEPT_SECONDS: Final = 60.0  # a token that is taken back, or a key, is good for so long at most
_LONGEST: Final = 16 * 1024
_TYPES: Final = frozenset({"", "JWT", "AT+JWT", "APPLICATION/AT+JWT"})


@dataclass(frozen=True, slots=True)
class Authority:
    """The authorisation server, and what its tokens must say.

    Attributes:
        issuer: its `iss`.
        audiences: a token must be made out for one of these.
        skew: seconds that clocks may differ by.
    """

    issuer: str
    audiences: frozenset[str]
    skew: float


class Teller(Protocol):
    """Tells the claims of a token that are proven."""

    def claims(self, text: str) -> Mapping[str, Any]:
        """The claims.

        Raises:
            TokenError: the token is none of the authority's.
            UnreachableError: the authority cannot be asked at the moment.
        """


class SignedTokens:
    """Tokens that are JWTs: proven by the authority's public keys."""

    def __init__(self, authority: Authority, keys: Keys, place: str, algorithms: Collection[str]) -> None:
        self._authority = authority
        self._keys = keys
        self._place = place
        self._algorithms = algorithms

    def claims(self, text: str) -> Mapping[str, Any]:
        """See Teller."""
        token = read_token(text, self._algorithms)
        if text_of(token.header, "typ").upper() not in _TYPES:
            raise TokenError("header")
        if text_of(token.claims, "iss") != self._authority.issuer:
            raise TokenError("iss")
        token.verify(self._keys.find(token, (self._place,)))
        return token.claims


class OpaqueTokens:
    """Tokens that say nothing themselves: the authority is asked about each (RFC 7662)."""

    def __init__(self, authority: Authority, client: Client, address: str, login: tuple[str, str]) -> None:
        self._authority = authority
        self._client = client
        self._address = address
        # RFC 6749, section 2.3.1: both parts are form-encoded first
        pair = ":".join(quote(part, safe="") for part in login).encode("ascii")
        self._login = f"Basic {base64.b64encode(pair).decode('ascii')}"

    def claims(self, text: str) -> Mapping[str, Any]:
        """See Teller."""
        headers = {
            "Authorization": self._login,
            "Accept": "application/json",
            "Content-Type": "application/x-www-form-urlencoded",
        }
        body = urlencode({"token": text, "token_type_hint": "access_token"}).encode("ascii")
        try:
            answer = self._client.send("POST", self._address, headers=headers, body=body)
        except ClientError:
            raise UnreachableError from None
        value, issues = fhirjson.read(answer.body) if answer.status == 200 else (None, [])
        if has_errors(issues) or not isinstance(value, dict):
            log.warning("the authority answers the introspection with status %s", answer.status)
            raise UnreachableError
        if value.get("active") is not True:
            raise TokenError("not active")
        if value.get("iss", self._authority.issuer) != self._authority.issuer:
            raise TokenError("iss")
        return value


class AccessTokens:
    """Lets the holders of access tokens in."""

    def __init__(self, authority: Authority, teller: Teller, clock: Callable[[], float]) -> None:
        self._authority = authority
        self._teller = teller
        self._clock = clock
        # by digest, the oldest first: when it may be believed no longer, and whose it is
        self._kept: OrderedDict[bytes, tuple[float, Caller]] = OrderedDict()
        self._lock = threading.Lock()

    def known(self, text: str) -> Caller | None:
        """The holder of a token that was found good less than a minute ago; quick, and asks nobody."""
        kept = self._kept.get(_digest(text))
        return kept[1] if kept and self._clock() < kept[0] else None

    def admit(self, text: str) -> Caller:
        """The holder of a token.

        Raises:
            TokenError: it is not taken.
            UnreachableError: the authority cannot be asked at the moment.
        """
        if len(text) > _LONGEST or not text.isascii():
            raise TokenError("form")
        now, authority = self._clock(), self._authority
        claims = self._teller.claims(text)
        ends = check_times(claims, now, authority.skew)
        if not audiences_of(claims) & authority.audiences:
            raise TokenError("aud")
        # RFC 9068 has client_id; azp is what OpenID Connect calls it
        name = text_of(claims, "client_id") or text_of(claims, "azp") or text_of(claims, "sub")
        if not name:
            raise TokenError("client_id")
        caller = Caller("system", name, text_of(claims, "jti"), read_scopes(_scope(claims)))
        self._keep(_digest(text), min(ends, now + _KEPT_SECONDS), caller)
        return caller

    def _keep(self, digest: bytes, until: float, caller: Caller) -> None:
        with self._lock:
            self._kept[digest] = (until, caller)
            self._kept.move_to_end(digest)
            if len(self._kept) > _MOST_KEPT:
                self._kept.popitem(last=False)


def _scope(claims: Mapping[str, Any]) -> str:
    """The scopes, separated by blanks (RFC 8693, section 4.2); some authorities write a list."""
    scope = claims.get("scope")
    if isinstance(scope, list):
        return " ".join(one for one in scope if isinstance(one, str))
    return scope if isinstance(scope, str) else ""


def _digest(text: str) -> bytes:
    return hashlib.sha256(text.encode("utf-8", "replace")).digest()
