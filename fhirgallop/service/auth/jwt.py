"""A signed token (JWT) taken apart, and its signature held against a public key.

Sources: RFC 7515 (JWS compact serialisation), RFC 7519 (JWT), RFC 8725 (best practices: the verifier chooses
the algorithm, never the token).
"""

from __future__ import annotations

import base64
import binascii
import re
from collections.abc import Collection, Mapping
from dataclasses import dataclass
from decimal import Decimal
from typing import Any, Final

from joserfc import jws
from joserfc.errors import JoseError
from joserfc.jwk import ECKey, OKPKey, RSAKey

from fhirgallop.codes import fhirjson
from fhirgallop.outcome import has_errors

_LONGEST: Final = 16 * 1024
_PART: Final = re.compile(r"[A-Za-z0-9_-]+")
_MOST_TEXT: Final = 2000
# the year 9999; what lies beyond is no moment
_LAST: Final = 253_402_300_800

PublicKey = RSAKey | ECKey | OKPKey

# what kind of key each algorithm needs, and on which curve (RFC 7518, section 3.1; RFC 8037, section 3.1)
KINDS: Final[Mapping[str, tuple[str, str]]] = {
    "ES256": ("EC", "P-256"), "ES384": ("EC", "P-384"), "ES512": ("EC", "P-521"), "EdDSA": ("OKP", "Ed25519"),
    "RS256": ("RSA", ""), "RS384": ("RSA", ""), "RS512": ("RSA", ""),
    "PS256": ("RSA", ""), "PS384": ("RSA", ""), "PS512": ("RSA", ""),
}  # fmt: skip


class TokenError(Exception):
    """A token that is not taken; the text says why, for the log, in words of ours alone."""


@dataclass(frozen=True, slots=True)
class Token:
    """A token whose parts were read; nothing of it is proven before `verify`.

    Attributes:
        text: the token as it came.
        header: its JOSE header.
        claims: its claims.
    """

    text: str
    header: Mapping[str, Any]
    claims: Mapping[str, Any]

    @property
    def algorithm(self) -> str:
        """How it says it is signed; empty where it does not say."""
        return text_of(self.header, "alg")

    def verify(self, key: PublicKey) -> None:
        """Holds the signature against a key that was chosen for this algorithm.

        Raises:
            TokenError: it was not signed with that key.
        """
        try:
            jws.deserialize_compact(self.text, key, algorithms=[self.algorithm])
        except (JoseError, ValueError, TypeError):
            raise TokenError("signature") from None


def read_token(text: str, algorithms: Collection[str]) -> Token:
    """A token's header and claims, read strictly.

    Raises:
        TokenError: it is no signed token, or is signed in a way that is not taken.
    """
    parts = text.split(".") if len(text) <= _LONGEST else []
    if len(parts) != 3 or not all(map(_PART.fullmatch, parts)):
        raise TokenError("form")
    token = Token(text, _object(parts[0]), _object(parts[1]))
    if token.algorithm not in algorithms or token.algorithm not in KINDS:
        raise TokenError("algorithm")
    if "crit" in token.header or "b64" in token.header:
        raise TokenError("critical header")
    return token


def _object(part: str) -> Mapping[str, Any]:
    try:
        raw = base64.urlsafe_b64decode(part + "=" * (-len(part) % 4))
    except (binascii.Error, ValueError):
        raise TokenError("form") from None
    value, issues = fhirjson.read(raw)
    if has_errors(issues) or not isinstance(value, dict):
        raise TokenError("form")
    return value


def text_of(values: Mapping[str, Any], name: str) -> str:
    """A claim that must be a text; empty where it is none, or longer than any should be."""
    value = values.get(name)
    return value if isinstance(value, str) and len(value) <= _MOST_TEXT else ""


def moment_of(values: Mapping[str, Any], name: str) -> float | None:
    """A claim that must be a moment (seconds since 1970); None where it is none."""
    value = values.get(name)
    if isinstance(value, bool) or not isinstance(value, int | Decimal) or not 0 <= value < _LAST:
        return None
    return float(value)


def audiences_of(values: Mapping[str, Any]) -> frozenset[str]:
    """Whom a token is made out for: one text, or a list of texts."""
    value = values.get("aud")
    listed = value if isinstance(value, list) else [value]
    return frozenset(one for one in listed if isinstance(one, str))


def check_times(claims: Mapping[str, Any], now: float, skew: float) -> float:
    """Whether a token is of now; gives the moment it ends at.

    Raises:
        TokenError: it has ended, is not yet valid, comes from the future, or does not say when it ends.
    """
    ends = moment_of(claims, "exp")
    if ends is None or ends <= now - skew:
        raise TokenError("exp")
    for name in ("iat", "nbf"):
        begins = moment_of(claims, name)
        if name in claims and (begins is None or begins > now + skew):
            raise TokenError(name)
    return ends
