"""People sign in with the site's OpenID Connect provider: authorization code flow with PKCE.

Sources: OpenID Connect Core 1.0, section 3.1; OpenID Connect Discovery 1.0; RFC 7636 (PKCE, S256); RFC 9207
(issuer in the answer). All that has to be remembered between the two halves is one secret in the browser's
cookie: state, nonce and code verifier are derived from it.
"""

from __future__ import annotations

import base64
import hashlib
import hmac
import threading
from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass
from typing import Any, Final
from urllib.parse import quote, urlencode

from fhirgallop.codes import fhirjson
from fhirgallop.delivery.addresses import origin_of
from fhirgallop.delivery.client import Client, ClientError
from fhirgallop.outcome import has_errors
from fhirgallop.service.auth.jwt import TokenError, audiences_of, check_times, read_token, text_of
from fhirgallop.service.auth.keys import Keys, UnreachableError

_KEPT_SECONDS: Final = 3600.0
_MOST_ROLES: Final = 1000


@dataclass(frozen=True, slots=True)
class Provider:
    """The provider, and what a site settled with it.

    Attributes:
        issuer: its issuer identifier.
        client: our client id.
        secret: our secret; empty for a public client.
        claim: claim of the id token that holds the roles; a dot leads into an object.
        roles: role here, by value of that claim.
        algorithms: signatures that are taken.
        back: our address that the browser comes back to.
        skew: seconds that clocks may differ by.
    """

    issuer: str
    client: str
    secret: str
    claim: str
    roles: Mapping[str, str]
    algorithms: Collection[str]
    back: str
    skew: float


@dataclass(frozen=True, slots=True)
class Person:
    """Who signed in: a digest of the provider's name for that person, and the roles."""

    subject: str
    roles: frozenset[str]


@dataclass(frozen=True, slots=True)
class _Addresses:
    authorize: str
    token: str
    keys: str
    until: float


class SignIn:
    """Both halves of a sign-in.

    Args:
        provider: whom to ask.
        client: speaks to the provider's origin.
        keys: finds the provider's keys.
        clock: seconds since 1970.
    """

    def __init__(self, provider: Provider, client: Client, keys: Keys, clock: Callable[[], float]) -> None:
        self._provider = provider
        self._client = client
        self._keys = keys
        self._clock = clock
        self._found: _Addresses | None = None
        self._lock = threading.Lock()

    def begin(self, secret: str) -> str:
        """The address at the provider that a browser with this secret is sent to.

        Raises:
            UnreachableError: the provider does not answer as it should.
        """
        asked = {
            "response_type": "code",
            "client_id": self._provider.client,
            "redirect_uri": self._provider.back,
            "scope": "openid",
            "state": _derived(secret, "state"),
            "nonce": _derived(secret, "nonce"),
            "code_challenge": challenge_of(_derived(secret, "verifier")),
            "code_challenge_method": "S256",
        }
        where = self._addresses().authorize
        return f"{where}{'&' if '?' in where else '?'}{urlencode(asked)}"

    def end(self, secret: str, answer: Mapping[str, str]) -> Person:
        """Who came back, with these parameters in the address.

        Raises:
            TokenError: nobody, or somebody without a role here.
            UnreachableError: the provider does not answer as it should.
        """
        if not secret:
            raise TokenError("no cookie")
        state = answer.get("state", "")
        if not hmac.compare_digest(state.encode("utf-8", "replace"), _derived(secret, "state").encode()):
            raise TokenError("state")
        if answer.get("iss", self._provider.issuer) != self._provider.issuer:
            raise TokenError("iss of the answer")
        code = answer.get("code", "")
        if not code or "error" in answer:
            raise TokenError("no code")
        addresses = self._addresses()
        claims = self._proven(self._exchanged(code, secret, addresses), secret, addresses)
        roles = frozenset(
            self._provider.roles[value]
            for value in _values(claims, self._provider.claim)
            if value in self._provider.roles
        )
        subject = text_of(claims, "sub")
        if not subject or not roles:
            raise TokenError("no role")
        named = repr((self._provider.issuer, subject)).encode("utf-8", "replace")
        return Person(hashlib.sha256(named).hexdigest(), roles)

    def _exchanged(self, code: str, secret: str, addresses: _Addresses) -> str:
        """The id token that the provider gives for a code."""
        provider = self._provider
        form = {
            "grant_type": "authorization_code",
            "code": code,
            "redirect_uri": provider.back,
            "client_id": provider.client,
            "code_verifier": _derived(secret, "verifier"),
        }
        headers = {"Content-Type": "application/x-www-form-urlencoded", "Accept": "application/json"}
        if provider.secret:
            pair = f"{quote(provider.client, safe='')}:{quote(provider.secret, safe='')}"
            headers["Authorization"] = f"Basic {base64.b64encode(pair.encode('ascii')).decode('ascii')}"
        answer = self._asked("POST", addresses.token, headers, urlencode(form).encode("ascii"))
        if answer is None:
            raise TokenError("code")
        token = answer.get("id_token")
        if not isinstance(token, str):
            raise TokenError("no id token")
        return token

    def _proven(self, text: str, secret: str, addresses: _Addresses) -> Mapping[str, Any]:
        """The claims of an id token (OpenID Connect Core 1.0, section 3.1.3.7)."""
        provider = self._provider
        token = read_token(text, provider.algorithms)
        claims = token.claims
        if text_of(claims, "iss") != provider.issuer:
            raise TokenError("iss")
        audiences = audiences_of(claims)
        if provider.client not in audiences or claims.get("azp", provider.client) != provider.client:
            raise TokenError("aud")
        check_times(claims, self._clock(), provider.skew)
        if not hmac.compare_digest(text_of(claims, "nonce").encode(), _derived(secret, "nonce").encode()):
            raise TokenError("nonce")
        token.verify(self._keys.find(token, (addresses.keys,)))
        return claims

    def _addresses(self) -> _Addresses:
        with self._lock:
            now = self._clock()
            if self._found is None or now >= self._found.until:
                self._found = self._discovered(now)
            return self._found

    def _discovered(self, now: float) -> _Addresses:
        issuer = self._provider.issuer
        found = self._asked("GET", f"{issuer.rstrip('/')}/.well-known/openid-configuration", {}, None)
        if found is None or found.get("issuer") != issuer:
            raise UnreachableError
        names = ("authorization_endpoint", "token_endpoint", "jwks_uri")
        addresses = [text_of(found, name) for name in names]
        # secrets go to no other host than the one that was set
        if any(origin_of(address) != origin_of(issuer) for address in addresses):
            raise UnreachableError
        authorize, token, keys = addresses
        return _Addresses(authorize, token, keys, now + _KEPT_SECONDS)

    def _asked(
        self, method: str, address: str, headers: Mapping[str, str], body: bytes | None
    ) -> Mapping[str, Any] | None:
        """The provider's answer; None where it refuses."""
        try:
            answer = self._client.send(method, address, headers=headers, body=body)
        except ClientError:
            raise UnreachableError from None
        if 400 <= answer.status < 500:
            return None
        value, issues = fhirjson.read(answer.body)
        if answer.status != 200 or has_errors(issues) or not isinstance(value, dict):
            raise UnreachableError
        return value


def challenge_of(verifier: str) -> str:
    """What is shown of a code verifier beforehand (RFC 7636, section 4.2, S256)."""
    return _base64(hashlib.sha256(verifier.encode("ascii")).digest())


def _values(claims: Mapping[str, Any], claim: str) -> list[str]:
    """The values of a claim, which is a text or a list of texts, perhaps inside an object."""
    found: Any = claims.get(claim)
    if found is None:
        found = claims
        for name in claim.split("."):
            found = found.get(name) if isinstance(found, dict) else None
    listed = found if isinstance(found, list) else [found]
    return [one for one in listed[:_MOST_ROLES] if isinstance(one, str)]


def _derived(secret: str, purpose: str) -> str:
    return _base64(hmac.digest(secret.encode("utf-8", "replace"), purpose.encode(), "sha256"))


def _base64(raw: bytes) -> str:
    return base64.urlsafe_b64encode(raw).decode("ascii").rstrip("=")
