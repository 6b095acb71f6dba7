"""Which addresses this program may speak to: origins that an operator listed, on networks that are allowed.

An origin is scheme, host and port (RFC 6454). Names are compared letter by letter after lower-casing, so that
no other spelling of a listed host, and no spelling of an unlisted one, passes.
"""

from __future__ import annotations

import ipaddress
import re
from typing import Final
from urllib.parse import urlsplit

_PORTS: Final = {"https": 443, "http": 80}
_HOST: Final = re.compile(r"[a-z0-9-]{1,63}(?:\.[a-z0-9-]{1,63})*", re.ASCII)
# A host whose last label is a number is read as an IPv4 address by many resolvers
# (WHATWG URL, "ends in a number").
_NUMBER: Final = re.compile(r"(?:[0-9]+|0x[0-9a-f]*)", re.ASCII)
_MAX_HOST: Final = 253
# Loopback, and the networks of a house: RFC 1918, RFC 6598, RFC 4193.
_PRIVATE: Final = tuple(
    map(
        ipaddress.ip_network,
        (
            "127.0.0.0/8",
            "10.0.0.0/8",
            "172.16.0.0/12",
            "192.168.0.0/16",
            "100.64.0.0/10",
            "::1/128",
            "fc00::/7",
        ),
    )
)


def origin_of(url: str) -> str | None:
    """The origin of an address, `https://host` or `https://host:port`; None for one that is not spoken to.

    Only http and https, no user, no fragment, no control character or blank; a host in ASCII without a
    closing dot, an IPv4 address of four plain numbers, or an IPv6 address in brackets.
    """
    if not url.isascii() or not url.isprintable() or any(letter in url for letter in " \\#"):
        return None
    try:
        parts = urlsplit(url)
        port = parts.port
    except ValueError:
        return None
    host = parts.hostname
    if parts.scheme not in _PORTS or parts.username is not None or host is None or port == 0:
        return None
    # "host:" with nothing behind it is one more spelling
    if parts.netloc.endswith(":") or not _is_host(host, parts.netloc):
        return None
    named = f"[{ipaddress.ip_address(host)}]" if ":" in host else host
    return f"{parts.scheme}://{named}" + (f":{port}" if port not in (None, _PORTS[parts.scheme]) else "")


def base_of(url: str) -> str | None:
    """A FHIR server's base in one spelling, without a closing slash; None for what is no plain base."""
    origin = origin_of(url)
    parts = urlsplit(url) if origin else None
    if origin is None or parts is None or parts.query or "?" in url:
        return None
    path = parts.path.rstrip("/")
    return f"{origin}{path}" if _is_straight(path) else None


def is_below(base: str, url: str) -> bool:
    """Whether an address lies on the server of `base` (as `base_of` gives it): the base itself or below it.

    One that a server may read otherwise than it looks (dot segments, encoded dots or slashes) does not.
    """
    origin = origin_of(url)
    parts = urlsplit(url) if origin else None
    if origin is None or parts is None or not _is_straight(parts.path):
        return False
    return f"{origin}{parts.path}/".startswith(f"{base}/")


def _is_straight(path: str) -> bool:
    lower = path.lower()
    if any(code in lower for code in ("%2e", "%2f", "%5c", "%25", ";")):
        return False
    *inner, last = path.split("/")[1:] or [""]
    return not any(part in (".", "..", "") for part in inner) and last not in (".", "..")


def _is_host(host: str, netloc: str) -> bool:
    if netloc.startswith("["):
        return _address(host) is not None and "%" not in host
    if len(host) > _MAX_HOST or host.endswith(".") or not _HOST.fullmatch(host):
        return False
    if _NUMBER.fullmatch(host.rpartition(".")[2]):
        return _address(host) is not None
    return True


def may_connect(address: str, *, private: bool) -> bool:
    """Whether an address that a name was resolved to may be connected to.

    Never link-local (where clouds answer with their own secrets), multicast, unspecified or reserved ones;
    loopback and private networks (RFC 1918, RFC 4193, RFC 6598) only with `private`. An IPv4 address inside
    an IPv6 one is judged as the former.
    """
    found = _address(address)
    if found is None:
        return False
    if isinstance(found, ipaddress.IPv6Address):
        inner = found.ipv4_mapped or found.sixtofour or (found.teredo[1] if found.teredo else None)
        if inner is not None:
            return may_connect(str(inner), private=private)
        if found.is_site_local:
            return False
    if found.is_global and not (found.is_multicast or found.is_reserved):
        return True
    return private and any(found in network for network in _PRIVATE)


def _address(text: str) -> ipaddress.IPv4Address | ipaddress.IPv6Address | None:
    try:
        return ipaddress.ip_address(text)
    except ValueError:
        return None
