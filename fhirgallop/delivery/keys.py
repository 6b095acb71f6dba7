"""Our private keys for signing in elsewhere, and the public ones as we publish them.

Source: SMART App Launch 2.2, "Client Authentication: Asymmetric": a client supports RS384 and ES384 and
publishes its public keys as a JSON Web Key Set (RFC 7517).
"""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from cryptography.hazmat.primitives.asymmetric.rsa import RSAPrivateKey
from cryptography.hazmat.primitives.serialization import load_pem_private_key
from joserfc import jwk
from joserfc.errors import JoseError
from joserfc.jwk import ECKey, RSAKey

from fhirgallop.codes import fhirjson
from fhirgallop.errors import SettingsError

# How long others may keep our keys; a new key is published at least so long before it signs.
KEPT_SECONDS: Final = 3600
_LEAST_RSA_BITS: Final = 2048
_MOST_BYTES: Final = 262_144


@dataclass(frozen=True, slots=True)
class SigningKey:
    """A private key with its name and its algorithm (`RS384` or `ES384`)."""

    kid: str
    alg: str
    key: RSAKey | ECKey


def read_keys(path: Path) -> tuple[SigningKey, ...]:
    """The private keys of a file: a JSON Web Key Set, one JSON Web Key, or one key in PEM.

    The first signs, all are published. To change keys: add the new one behind, wait an hour or longer, put it
    first, wait as long as assertions live, take the old one out.

    Raises:
        SettingsError: the file cannot be read, or holds a key that is not of the two kinds.
    """
    try:
        text = path.read_bytes()
        if len(text) > _MOST_BYTES:
            raise SettingsError(f"{path}: this is larger than a file of keys is")
        keys = tuple(_signing(key, path) for key in _parsed(text))
    except OSError as error:
        raise SettingsError(f"{path}: {error.strerror}; check deliver_key") from None
    except (JoseError, ValueError, TypeError, KeyError, AttributeError):
        raise SettingsError(
            f"{path}: no private key can be read from it; write a JSON Web Key Set or one key in PEM"
        ) from None
    if not keys or len({key.kid for key in keys}) < len(keys):
        raise SettingsError(f"{path}: it must hold at least one key, and no two of one kid")
    return keys


def public_set(keys: Sequence[SigningKey]) -> bytes:
    """The public halves as a JSON Web Key Set, for others to check our signatures with."""
    published = [
        {
            **key.key.as_dict(private=False),
            "kid": key.kid,
            "alg": key.alg,
            "use": "sig",
            "key_ops": ["verify"],
        }
        for key in keys
    ]
    return fhirjson.write({"keys": published})


def _parsed(text: bytes) -> list[Any]:
    if b"-----BEGIN" in text:
        found = load_pem_private_key(text, password=None)
        return [jwk.import_key(text, "RSA" if isinstance(found, RSAPrivateKey) else "EC")]
    value = json.loads(text)
    return [jwk.import_key(one) for one in value.get("keys", [value])]


def _signing(key: Any, path: Path) -> SigningKey:
    kid = key.kid or key.thumbprint()
    if isinstance(key, RSAKey) and key.is_private:
        if key.public_key.key_size < _LEAST_RSA_BITS:
            raise SettingsError(f"{path}: an RSA key needs {_LEAST_RSA_BITS} bits or more")
        return SigningKey(kid, "RS384", key)
    if isinstance(key, ECKey) and key.is_private and key.curve_name == "P-384":
        return SigningKey(kid, "ES384", key)
    raise SettingsError(f"{path}: use private RSA keys (RS384) or keys on the curve P-384 (ES384)")
