"""What settings must say before other machines may reach the service, and before anybody is believed.

Each function gives the faults it finds, each with its cure; none means that it is safe to start.
"""

from __future__ import annotations

import ipaddress
from collections.abc import Iterator
from typing import TYPE_CHECKING, Final
from urllib.parse import urlsplit

if TYPE_CHECKING:
    from fhirgallop.settings import Settings

_P: Final = "FHIRGALLOP_"
_WAYS: Final = f"{_P}CDS_CLIENTS, {_P}AUTHORITY, {_P}ADMIN_TOKEN or {_P}SIGN_IN"


def faults(settings: Settings) -> Iterator[str]:
    """Every reason why the service may not start with these settings."""
    yield from _listening(settings)
    if settings.authorised:
        yield from _address(settings)
    yield from _clients(settings)
    yield from _authority(settings)
    yield from _people(settings)
    yield from _deliveries(settings)
    if settings.second_person and not settings.sign_in:
        yield f"{_P}SECOND_PERSON: set {_P}SIGN_IN, so that two persons can be told apart"
    if "" in settings.cds_system_actions:
        yield f"{_P}CDS_SYSTEM_ACTIONS: name each client by its `iss`"
    yield from _secure(
        settings, "CDS_CHARTS", *(base for bases in settings.cds_charts.values() for base in bases)
    )
    for origin in sorted(settings.cors_origins):
        if _origin(origin) != origin:
            yield f"{_P}CORS_ORIGINS: {origin!r} is no origin; write scheme://host, each one by name"


def _listening(settings: Settings) -> Iterator[str]:
    if (settings.certificate is None) != (settings.certificate_key is None):
        yield f"{_P}CERTIFICATE and {_P}CERTIFICATE_KEY: give both, or none"
    for proxy in sorted(settings.proxies):
        if not _is_network(proxy):
            yield f"{_P}PROXIES: {proxy!r} is no address and no network; write them as numbers"
    if settings.behind_proxy and not settings.proxies:
        yield f"{_P}PROXIES: name the addresses of the proxy"
    outside = not is_loopback(settings.host)
    if (outside or settings.behind_proxy) and not settings.authorised:
        yield (
            f"{_P}HOST: without authorisation no other machine may reach the service; set {_WAYS}, or listen "
            "on 127.0.0.1 without a proxy"
        )
    if outside and not (settings.certificate or settings.behind_proxy):
        yield (
            f"{_P}HOST: without TLS no other machine may reach the service; set {_P}CERTIFICATE and "
            f"{_P}CERTIFICATE_KEY, or {_P}BEHIND_PROXY where a proxy ends TLS"
        )


def _address(settings: Settings) -> Iterator[str]:
    address = settings.address
    if not address:
        yield f"{_P}ADDRESS: with authorisation it must be set, for tokens are made out for it"
    elif not _is_plain(address, loopback_http=True):
        yield f"{_P}ADDRESS: write https://host, or https://host/path; http is for this machine only"
    elif urlsplit(address).hostname not in settings.names:
        yield f"{_P}ADDRESS: its host must be among {_P}NAMES"


def _clients(settings: Settings) -> Iterator[str]:
    for issuer, places in sorted(settings.cds_clients.items()):
        if not issuer or not places:
            yield f"{_P}CDS_CLIENTS: name each client by its iss, and where its keys stand"
        yield from _secure(settings, "CDS_CLIENTS", *(one for one in places if "://" in one))


def _authority(settings: Settings) -> Iterator[str]:
    details = ("authority_keys", "authority_introspection", "authority_client", "authority_tokens")
    if not settings.authority:
        for name in details:
            if getattr(settings, name):
                yield f"{_P}{name.upper()}: it means nothing without {_P}AUTHORITY"
        return
    if bool(settings.authority_keys) == bool(settings.authority_introspection):
        yield (
            f"{_P}AUTHORITY: set {_P}AUTHORITY_KEYS for tokens that are JWTs, or "
            f"{_P}AUTHORITY_INTROSPECTION for others"
        )
    if settings.authority_introspection and not (settings.authority_client and settings.authority_secret):
        yield f"{_P}AUTHORITY_INTROSPECTION: it needs {_P}AUTHORITY_CLIENT and {_P}AUTHORITY_SECRET"
    if not settings.authority_tokens:
        yield f"{_P}AUTHORITY_TOKENS: set it; clients look up here where to get a token"
    keys = [settings.authority_keys] if "://" in settings.authority_keys else []
    yield from _secure(settings, "AUTHORITY_KEYS", *keys)
    yield from _secure(settings, "AUTHORITY_INTROSPECTION", settings.authority_introspection)
    yield from _secure(settings, "AUTHORITY_TOKENS", settings.authority_tokens)


def _people(settings: Settings) -> Iterator[str]:
    if not settings.sign_in:
        if settings.sign_in_client or settings.sign_in_roles or settings.sign_in_secret:
            yield f"{_P}SIGN_IN: name the issuer, or leave the other sign-in settings out"
        return
    yield from _secure(settings, "SIGN_IN", settings.sign_in)
    if not settings.sign_in_client:
        yield f"{_P}SIGN_IN_CLIENT: register the service with the issuer, and give the client id"
    if not settings.sign_in_roles:
        yield f'{_P}SIGN_IN_ROLES: say who may what, such as {{"cardiology-it": "informatician"}}'


def _deliveries(settings: Settings) -> Iterator[str]:
    yield from _secure(settings, "DELIVER_TO", settings.deliver_to)
    yield from _secure(settings, "DELIVER_TOKEN_URL", settings.deliver_token_url)
    if bool(settings.deliver_client) != bool(settings.deliver_key):
        yield f"{_P}DELIVER_CLIENT and {_P}DELIVER_KEY: give both, or none"
    if settings.deliver_client and not settings.deliver_to:
        yield f"{_P}DELIVER_TO: name the endpoint, or leave {_P}DELIVER_CLIENT out"


def _secure(settings: Settings, name: str, *addresses: str) -> Iterator[str]:
    for address in addresses:
        if address and not _is_plain(address, loopback_http=settings.loopback_http):
            yield (
                f"{_P}{name}: every address must be https://host/path; http is for this machine, with "
                f"{_P}LOOPBACK_HTTP"
            )


def is_loopback(host: str) -> bool:
    """Whether a host, as a name or a number, is this machine by its form; no name is looked up."""
    if host == "localhost":
        return True
    try:
        return ipaddress.ip_address(host).is_loopback
    except ValueError:
        return False


def _is_plain(address: str, *, loopback_http: bool) -> bool:
    """Whether an address is https without user, query and fragment; http for this machine if allowed."""
    try:
        parts = urlsplit(address)
        host = parts.hostname or ""
        extra = parts.username is not None or parts.query or parts.fragment or parts.port == 0
    except ValueError:
        return False
    if extra or not host or not address.isascii() or not address.isprintable() or " " in address:
        return False
    return parts.scheme == "https" or (parts.scheme == "http" and loopback_http and is_loopback(host))


def _origin(text: str) -> str | None:
    try:
        parts = urlsplit(text)
        port = f":{parts.port}" if parts.port else ""
    except ValueError:
        return None
    host = parts.hostname or ""
    named = f"[{host}]" if ":" in host else host
    return f"{parts.scheme}://{named}{port}" if parts.scheme in ("http", "https") and host != "*" else None


def _is_network(text: str) -> bool:
    try:
        network = ipaddress.ip_network(text)
    except ValueError:
        return False
    return network.prefixlen > 0
