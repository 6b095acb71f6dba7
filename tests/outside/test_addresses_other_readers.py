"""Addresses as two independent libraries read them: what we take for a listed origin, they take for it too.

Two readers that see different hosts in one address are how allow-lists are passed by. Readers: `httpx.URL`
(RFC 3986) and `pydantic_core.Url` (the WHATWG's URL standard, in Rust), both general-purpose libraries.
"""

from __future__ import annotations

import httpx
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from pydantic_core import Url

from fhirgallop.delivery.addresses import base_of, is_below, origin_of

PIECES = st.sampled_from(
    ["https", "http", "HTTPS", "://", ":", "/", "//", "\\", "@", "#", "?", "&", "=", "%", "%2e", "%2f", "%00",
     ".", "..", ";", " ", "\t", "\n", "[", "]", "[::1]", "[::ffff:127.0.0.1]", "127.0.0.1", "127.1",
     "2130706433", "0x7f.1", "chart.example", "evil.example", "CHART.example", "user", ":443", ":8443", ":0",
     "fhir", "\u00e9", "\u3002", "\u202e", "xn--"]
)  # fmt: skip
ADDRESSES = st.lists(PIECES, max_size=9).map("".join) | st.lists(PIECES, max_size=7).map(
    lambda pieces: "https://chart.example" + "".join(pieces)
)


@settings(max_examples=500, deadline=None)
@given(ADDRESSES)
@example("https://CHART.example:8443/fhir?x=1")
@example("https://[::FFFF:127.0.0.1]:443/")
def test_all_readers_see_the_same_origin(url: str) -> None:
    ours = origin_of(url)
    if ours is None:
        return
    default = {"https": 443, "http": 80}
    for scheme, host, port in (_by_httpx(url), _by_pydantic(url)):
        named = f"[{host}]" if ":" in host else host
        theirs = f"{scheme}://{named}" + ("" if port in (None, default[scheme]) else f":{port}")
        assert origin_of(theirs) == ours


def _by_httpx(url: str) -> tuple[str, str, int | None]:
    read = httpx.URL(url)
    return read.scheme, read.host, read.port


def _by_pydantic(url: str) -> tuple[str, str, int | None]:
    read = Url(url)
    return read.scheme, (read.host or "").strip("[]"), read.port


@settings(max_examples=500, deadline=None)
@given(ADDRESSES)
@example("https://chart.example/fhir/Observation?page=2")
def test_what_lies_below_a_base_lies_there_when_it_is_normalised(url: str) -> None:
    """The URL standard takes dot segments out, in all their spellings; so may a server."""
    base = "https://chart.example/fhir"
    for one in (url, f"{base}/{url}"):
        if is_below(base, one):
            path = Url(one).path or ""
            assert path == "/fhir" or path.startswith("/fhir/")


@pytest.mark.parametrize("path", ["/fhir", "/fhir/", "/a/b/fhir", ""])
def test_a_base_has_one_spelling(path: str) -> None:
    assert base_of(f"HTTPS://Chart.Example:443{path}") == f"https://chart.example{path.rstrip('/')}"
