"""Signs in at the record system's authorisation server with our own key, and keeps the token while it lasts.

Sources: SMART App Launch 2.2, "Backend Services" and "Client Authentication: Asymmetric"; RFC 7523 (client
assertions), RFC 6749 (token endpoint, error codes), RFC 6750 (form of a token).
"""

from __future__ import annotations

import re
import threading
from collections.abc import Callable
from dataclasses import dataclass, replace
from datetime import datetime
from typing import Any, Final
from urllib.parse import urlencode

from joserfc import jwt

from fhirgallop.codes import fhirjson
from fhirgallop.delivery.addresses import origin_of
from fhirgallop.delivery.answer import Verdict, no_answer
from fhirgallop.delivery.client import Answer, Client, ClientError
from fhirgallop.delivery.destination import Destination
from fhirgallop.delivery.keys import SigningKey

ASSERTION_SECONDS: Final = 240  # at most 300 by the source; a slow clock of the other side has a minute
_ASSERTION_TYPE: Final = "urn:ietf:params:oauth:client-assertion-type:jwt-bearer"
_PATIENCE: Final = 10.0
_EARLY_SECONDS: Final = 30
_UNSAID_SECONDS: Final = 60
_LONGEST_SECONDS: Final = 3600
_TOKEN: Final = re.compile(r"[A-Za-z0-9._~+/-]{1,8192}=*")
# RFC 6749, section 5.2
_ERRORS: Final = frozenset({"invalid_request", "invalid_client", "invalid_grant", "unauthorized_client",
                            "unsupported_grant_type", "invalid_scope"})  # fmt: skip


class NoTokenError(Exception):
    """There is no token; `verdict` says whether to come again or to call a person."""

    def __init__(self, verdict: Verdict) -> None:
        self.verdict: Final = verdict
        super().__init__(verdict.reason)


@dataclass(frozen=True, slots=True)
class Identity:
    """Who we are at the authorisation server: client id, signing key, and the scopes asked for."""

    client: str
    key: SigningKey
    scope: str


class Access:
    """Gives the access token; of several threads that need a new one, one asks."""

    def __init__(
        self,
        client: Client,
        place: Destination,
        identity: Identity,
        *,
        clock: Callable[[], datetime],
        new_id: Callable[[], str],
    ) -> None:
        self._client = client
        self._place = place
        self._identity = identity
        self._clock = clock
        self._new_id = new_id
        self._lock = threading.Lock()
        self._token = ""
        self._until = 0.0
        self._token_url = place.token_url

    def token(self, refused: str = "") -> str:
        """A token that lasts for a while; a new one when `refused` is the one in hand.

        Raises:
            NoTokenError: there is none to be had now.
        """
        with self._lock:
            now = self._clock().timestamp()
            if not self._token or now >= self._until or self._token == refused:
                self._token, seconds = self._asked()
                self._until = now + seconds - min(_EARLY_SECONDS, seconds / 4)
            return self._token

    def _asked(self) -> tuple[str, float]:
        self._token = ""
        url = self._token_url or self._discovered()
        form = urlencode(
            {
                "grant_type": "client_credentials",
                "scope": self._identity.scope,
                "client_assertion_type": _ASSERTION_TYPE,
                "client_assertion": self._assertion(url),
            }
        )
        headers = {"Content-Type": "application/x-www-form-urlencoded", "Accept": "application/json"}
        answer = self._send("POST", url, headers, form.encode("ascii"))
        said = _object(answer)
        if answer.status != 200:
            raise NoTokenError(_refused(answer, said))
        token, kind = said.get("access_token"), said.get("token_type")
        if not (isinstance(token, str) and _TOKEN.fullmatch(token)):
            raise _later("no-token", "the token endpoint answered 200 without a token")
        if not (isinstance(kind, str) and kind.lower() == "bearer"):
            raise _later("no-token", "the token endpoint gave another kind of token than bearer")
        self._token_url = url
        return token, _seconds(said.get("expires_in"))

    def _discovered(self) -> str:
        """The token endpoint that the base names; on another origin only where a setting names it too."""
        url = f"{self._place.base}/.well-known/smart-configuration"
        answer = self._send("GET", url, {"Accept": "application/json"}, None)
        found = _object(answer).get("token_endpoint") if answer.status == 200 else None
        if not isinstance(found, str) or origin_of(found) is None:
            raise _later("no-token", f"discovery answered {answer.status} and no usable token_endpoint")
        if origin_of(found) != origin_of(self._place.base):
            reason = (
                "discovery names a token endpoint on another server; set deliver_token_url if it is right"
            )
            raise NoTokenError(Verdict("denied", "token-elsewhere", reason, well=False, ends=False))
        return found

    def _assertion(self, audience: str) -> str:
        key = self._identity.key
        header = {"alg": key.alg, "kid": key.kid, "typ": "JWT"}
        claims = {
            "iss": self._identity.client,
            "sub": self._identity.client,
            "aud": audience,
            "exp": int(self._clock().timestamp()) + ASSERTION_SECONDS,
            "jti": self._new_id(),
        }
        return jwt.encode(header, claims, key.key, algorithms=[key.alg])

    def _send(self, method: str, url: str, headers: dict[str, str], body: bytes | None) -> Answer:
        try:
            return self._client.send(method, url, headers=headers, body=body, timeout=_PATIENCE)
        except ClientError as error:
            raise NoTokenError(replace(no_answer(error), ends=False)) from None


def _object(answer: Answer) -> dict[str, Any]:
    found, _ = fhirjson.read(answer.body, max_bytes=1_048_576)
    return found if isinstance(found, dict) else {}


def _refused(answer: Answer, said: dict[str, Any]) -> Verdict:
    error = said.get("error")
    named = f" ({error})" if isinstance(error, str) and error in _ERRORS else ""
    reason = f"the token endpoint answered {answer.status}{named}"
    if answer.status in (400, 401, 403):
        return Verdict("denied", "no-token", reason, well=False, ends=False)
    wait = answer.headers.get("retry-after", "")
    return Verdict("later", "no-token", reason, well=False, ends=False, retry_after=wait)


def _later(kind: str, reason: str) -> NoTokenError:
    return NoTokenError(Verdict("later", kind, reason, well=False, ends=False))


def _seconds(said: Any) -> float:
    """How long a token lasts; a short while where nothing credible is said."""
    if isinstance(said, bool) or not isinstance(said, int) or said <= 0:
        return _UNSAID_SECONDS
    return min(said, _LONGEST_SECONDS)
