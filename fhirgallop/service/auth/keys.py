"""Public keys of those who sign tokens: read from listed places, kept as long as the place allows.

Sources: RFC 7517 (JWK); SMART App Launch 2.2, "Signature Verification" (find by `kid` and `kty`, zero or
several keys: refuse; keep no longer than Cache-Control says; an unknown `kid`: ask again).
"""

from __future__ import annotations

import re
import threading
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from joserfc import jwk
from joserfc.errors import JoseError
from joserfc.jwk import ECKey, OKPKey, RSAKey

from fhirgallop.codes import fhirjson
from fhirgallop.delivery.client import Client, ClientError
from fhirgallop.errors import SettingsError
from fhirgallop.outcome import has_errors
from fhirgallop.service.auth.jwt import KINDS, PublicKey, Token, TokenError, text_of

_MOST_KEYS: Final = 100
_UNTOLD: Final = 300.0  # seconds that keys are kept where the place does not say
_LONGEST: Final = 86_400.0
_ASK_AGAIN: Final = 30.0  # seconds between two askings for a key that was not there
_AFTER_FAILURE: Final = 5.0
_WAIT: Final = 1.0  # longest that a thread stands idle while another asks
_AGE: Final = re.compile(r"max-age=\"?(\d{1,9})\"?")
_RSA_BITS: Final = (2048, 8192)


class UnreachableError(Exception):
    """A place with keys gives none at the moment; nothing is known of the token."""


@dataclass(frozen=True, slots=True)
class _Kept:
    """The keys of one place; `until` is when they are too old, `again` when an unknown one is asked for."""

    keys: tuple[Mapping[str, Any], ...]
    until: float
    again: float


class Keys:
    """Finds the one key that a token can have been signed with.

    Args:
        client: speaks to the places that are addresses.
        clock: seconds, never going back.
    """

    def __init__(self, client: Client, clock: Callable[[], float]) -> None:
        self._client = client
        self._clock = clock
        self._kept: dict[str, _Kept] = {}
        self._failed: dict[str, float] = {}
        self._locks: dict[str, threading.Lock] = {}
        self._lock = threading.Lock()

    def find(self, token: Token, places: Iterable[str]) -> PublicKey:
        """The key at these places, which are all trusted for the token's issuer.

        Raises:
            TokenError: there is no such key, or more than one.
            UnreachableError: a place could not be asked.
        """
        places = tuple(places)
        found = [key for place in places for key in _fitting(token, self._of(place))]
        if not found:
            found = [key for place in places for key in _fitting(token, self._of(place, anew=True))]
        if len(found) != 1:
            raise TokenError("no such key" if not found else "several such keys")
        return _usable(found[0])

    def _of(self, place: str, *, anew: bool = False) -> tuple[Mapping[str, Any], ...]:
        if (keys := self._fresh(place, anew=anew)) is not None:
            return keys
        with self._lock:
            lock = self._locks.setdefault(place, threading.Lock())
        # one asking at a time; who waited finds what the other brought
        if not lock.acquire(timeout=_WAIT):
            raise UnreachableError
        try:
            if (keys := self._fresh(place, anew=anew)) is not None:
                return keys
            return self._asked(place, anew=anew)
        finally:
            lock.release()

    def _fresh(self, place: str, *, anew: bool) -> tuple[Mapping[str, Any], ...] | None:
        """The keys that are kept, unless they have to be asked for."""
        kept = self._kept.get(place)
        return kept.keys if kept and self._clock() < (kept.again if anew else kept.until) else None

    def _asked(self, place: str, *, anew: bool) -> tuple[Mapping[str, Any], ...]:
        now = self._clock()
        if now < self._failed.get(place, now):
            raise UnreachableError
        try:
            keys, seconds = self._read(place)
        except UnreachableError:
            self._failed[place] = now + _AFTER_FAILURE
            raise
        before = self._kept.get(place)
        again = now + _ASK_AGAIN if anew else (before.again if before else now)
        self._kept[place] = _Kept(keys, now + seconds, again)
        return keys

    def _read(self, place: str) -> tuple[tuple[Mapping[str, Any], ...], float]:
        if "://" not in place:
            try:
                return keys_of(Path(place)), _UNTOLD
            except SettingsError:  # it was there when the service started
                raise UnreachableError from None
        try:
            answer = self._client.send("GET", place, headers={"Accept": "application/json"})
        except ClientError:
            raise UnreachableError from None
        keys = _read_set(answer.body) if answer.status == 200 else None
        if keys is None:
            raise UnreachableError
        return keys, _lifetime(answer.headers.get("cache-control", ""))


def keys_of(path: Path) -> tuple[Mapping[str, Any], ...]:
    """The keys in a file.

    Raises:
        SettingsError: it cannot be read, or holds no key set.
    """
    try:
        keys = _read_set(path.read_bytes())
    except OSError as error:
        raise SettingsError(f"{path}: no keys can be read from it ({type(error).__name__})") from None
    if keys is None:
        raise SettingsError(f'{path}: that is no set of public keys; write {{"keys": [...]}} (RFC 7517)')
    return keys


def _read_set(text: bytes) -> tuple[Mapping[str, Any], ...] | None:
    value, issues = fhirjson.read(text)
    keys = value.get("keys") if isinstance(value, dict) and not has_errors(issues) else None
    if not isinstance(keys, list) or len(keys) > _MOST_KEYS:
        return None
    # a private key that is public is nobody's any more
    return tuple(key for key in keys if isinstance(key, dict) and "d" not in key)


def _lifetime(cache_control: str) -> float:
    directives = {part.strip().lower() for part in cache_control.split(",")}
    if directives & {"no-store", "no-cache"}:
        return 0.0
    ages = [float(found[1]) for part in directives if (found := _AGE.fullmatch(part))]
    return min(ages[0], _LONGEST) if ages else _UNTOLD


def _fitting(token: Token, keys: Iterable[Mapping[str, Any]]) -> list[Mapping[str, Any]]:
    kind, curve = KINDS[token.algorithm]
    kid = text_of(token.header, "kid")
    return [
        key
        for key in keys
        if key.get("kid") == kid
        and key.get("kty") == kind
        and (not curve or key.get("crv") == curve)
        and key.get("use", "sig") == "sig"
        and key.get("alg", token.algorithm) == token.algorithm
        and _may_verify(key.get("key_ops"))
    ]


def _may_verify(uses: Any) -> bool:
    return uses is None or (isinstance(uses, list) and "verify" in uses)


def _usable(key: Mapping[str, Any]) -> PublicKey:
    least, most = _RSA_BITS
    # six bits a letter, and a few that are left over
    if key["kty"] == "RSA" and not least <= len(text_of(key, "n")) * 6 <= most + 8:
        raise TokenError("key size")
    try:
        made = jwk.import_key(dict(key))
    except (JoseError, ValueError, TypeError, KeyError):
        raise TokenError("key") from None
    if not isinstance(made, RSAKey | ECKey | OKPKey):
        raise TokenError("key")
    return made
