"""Opens the ways in that the settings name."""

from __future__ import annotations

import logging
import time
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Final

from sqlalchemy import Engine

from fhirgallop.delivery.addresses import origin_of
from fhirgallop.delivery.client import Client, trust
from fhirgallop.delivery.keys import public_set, read_keys
from fhirgallop.errors import SettingsError
from fhirgallop.service.auth.access import AccessTokens, Authority, OpaqueTokens, SignedTokens, Teller
from fhirgallop.service.auth.admin import Administrators
from fhirgallop.service.auth.cds import CdsClients, CdsRules
from fhirgallop.service.auth.gate import Gate
from fhirgallop.service.auth.keys import Keys, keys_of
from fhirgallop.service.auth.openid import Provider, SignIn
from fhirgallop.service.auth.people import People
from fhirgallop.settings import Settings
from fhirgallop.storage.tokens import Sessions, UsedTokens

log: Final = logging.getLogger("fhirgallop.service")

_SECONDS: Final = 3.0
_MOST_BYTES: Final = 256 * 1024
_BASES: Final = ("", "/fhir/r4", "/fhir/r4b", "/fhir/r5")
SIGNED_IN: Final = "/sign-in/answer"


@dataclass(frozen=True, slots=True)
class _Site:
    """What every way in is made with."""

    settings: Settings
    engine: Engine
    clock: Callable[[], float]
    clients: list[Client]

    def client(self, *places: str) -> Client:
        """Speaks to the places that are addresses, and to nobody else."""
        given = self.settings
        made = Client(
            _origins(places),
            timeout=_SECONDS,
            most_bytes=_MOST_BYTES,
            private=given.private_network or given.loopback_http,
            verify=trust(given.trusted),
        )
        self.clients.append(made)
        return made

    def keys(self, *places: str) -> Keys:
        """Finds keys at these places; those that are files are read now, so that a fault is told at once."""
        for place in places:
            if "://" not in place:
                keys_of(Path(place))
        return Keys(self.client(*places), time.monotonic)


def open_gate(settings: Settings, engine: Engine, clock: Callable[[], datetime]) -> Gate:
    """The gate.

    Raises:
        SettingsError: a file with keys or a secret cannot be used.
    """
    if not settings.authorised:
        log.info("authorisation is off: every program of this machine may ask everything")
    site = _Site(settings, engine, lambda: clock().timestamp(), [])
    address = settings.address.rstrip("/")
    people = People(Sessions(engine), site.clock, settings.session_minutes * 60)
    return Gate(
        closed=settings.authorised,
        address=address,
        cds=_cds(site),
        tokens=_tokens(site, address),
        administrators=Administrators(settings.admin_token, time.monotonic),
        people=people,
        sign_in=_sign_in(site, address),
        clients=site.clients,
    )


def _cds(site: _Site) -> CdsClients | None:
    given = site.settings
    if not given.cds_clients:
        return None
    places = [place for listed in given.cds_clients.values() for place in listed]
    rules = CdsRules(given.cds_clients, given.cds_algorithms, given.cds_token_seconds, given.clock_skew)
    return CdsClients(rules, site.keys(*places), UsedTokens(site.engine), site.clock)


def _tokens(site: _Site, address: str) -> AccessTokens | None:
    given = site.settings
    if not given.authority:
        return None
    audiences = given.audiences or frozenset(address + base for base in _BASES)
    authority = Authority(given.authority, audiences, given.clock_skew)
    teller: Teller
    if given.authority_keys:
        keys = site.keys(given.authority_keys)
        teller = SignedTokens(authority, keys, given.authority_keys, given.authority_algorithms)
    else:
        login = (given.authority_client, _secret(given.authority_secret))
        client = site.client(given.authority_introspection)
        teller = OpaqueTokens(authority, client, given.authority_introspection, login)
    return AccessTokens(authority, teller, site.clock)


def _sign_in(site: _Site, address: str) -> SignIn | None:
    given = site.settings
    if not given.sign_in:
        return None
    provider = Provider(
        issuer=given.sign_in,
        client=given.sign_in_client,
        secret=_secret(given.sign_in_secret),
        claim=given.sign_in_claim,
        roles=given.sign_in_roles,
        algorithms=given.authority_algorithms,
        back=address + SIGNED_IN,
        skew=given.clock_skew,
    )
    return SignIn(provider, site.client(given.sign_in), site.keys(given.sign_in), site.clock)


def public_keys(settings: Settings) -> bytes:
    """Our own public keys, as a key set; an empty one where we sign in nowhere.

    Raises:
        SettingsError: the file with the private ones cannot be used.
    """
    return public_set(read_keys(settings.deliver_key) if settings.deliver_key else ())


def _secret(path: Path | None) -> str:
    if path is None:
        return ""
    try:
        secret = path.read_text("ascii").strip()
    except (OSError, UnicodeDecodeError) as error:
        raise SettingsError(f"{path}: no secret can be read from it ({type(error).__name__})") from None
    if not secret:
        raise SettingsError(f"{path}: there is no secret in it")
    return secret


def _origins(places: Iterable[str]) -> set[str]:
    found = {place: origin_of(place) for place in places if "://" in place}
    if wrong := [place for place, origin in found.items() if origin is None]:
        raise SettingsError(f"{wrong[0]!r} is no address that can be asked; write https://host/path")
    return {origin for origin in found.values() if origin}
