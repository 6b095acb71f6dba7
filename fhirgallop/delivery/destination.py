"""The record system's FHIR endpoint, as the settings name it, and the client that speaks to it alone."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

from fhirgallop.delivery.addresses import origin_of
from fhirgallop.delivery.client import Client, trust
from fhirgallop.settings import Settings

_MOST_ANSWERED: Final = 16 * 1024 * 1024


@dataclass(frozen=True, slots=True)
class Destination:
    """Where Bundles go, and where the token for it comes from.

    Attributes:
        base: the FHIR endpoint, without a slash at the end; transactions are posted to it.
        token_url: the token endpoint; empty where it is to be discovered below the base.
    """

    base: str
    token_url: str = ""

    def origins(self) -> frozenset[str]:
        """Those that are spoken to, and no other."""
        found = (origin_of(url) for url in (self.base, self.token_url))
        return frozenset(origin for origin in found if origin)


def destination(settings: Settings) -> Destination | None:
    """The destination that the settings name; None when nothing is delivered."""
    if not settings.deliver_to:
        return None
    return Destination(settings.deliver_to.rstrip("/"), settings.deliver_token_url)


def client_for(place: Destination, settings: Settings, threads: int) -> Client:
    """The client for so many threads.

    Raises:
        SettingsError: the file of certificates, or an address, cannot be used.
    """
    return Client(
        place.origins(),
        timeout=settings.delivery_timeout,
        most_bytes=_MOST_ANSWERED,
        private=settings.private_network or settings.loopback_http,
        verify=trust(settings.trusted),
        connections=threads + 1,
    )
