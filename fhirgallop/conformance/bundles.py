"""Clause: Bundles beside the invariants bdl-*: what fullUrl, request and resource say of one another.

Source: FHIR Bundle and "RESTful API, transaction" (R4, R4B, R5).
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from typing import Any

from fhirgallop.conformance.editions import Edition
from fhirgallop.conformance.node import Node
from fhirgallop.outcome import Issue

_REST = re.compile(r"https?://\S+?/([A-Z][A-Za-z]{1,63})/([A-Za-z0-9.-]{1,64})", re.ASCII)
_REQUEST = re.compile(
    r"(?:https?://[^\s?]*/)?([A-Z][A-Za-z]{1,63})(?:/([A-Za-z0-9.-]{1,64}))?(?:\?\S*)?", re.ASCII
)


def check(node: Node, edition: Edition) -> Iterator[Issue]:
    """Issues of one Bundle.entry."""
    resource = node.value.get("resource")
    if not isinstance(resource, Mapping):
        return
    kind = resource.get("resourceType")
    if not isinstance(kind, str) or kind not in edition.resources:
        return
    yield from _full_url(node, resource, kind, edition)
    bundle = node.parent
    if bundle is not None and bundle.value.get("type") in ("transaction", "batch"):
        yield from _request(node, resource, kind, edition)


def _full_url(node: Node, resource: Mapping[Any, Any], kind: str, edition: Edition) -> Iterator[Issue]:
    url, ident = node.value.get("fullUrl"), resource.get("id")
    match = _REST.fullmatch(url) if isinstance(url, str) else None
    if not match or match.group(1) not in edition.resources:
        return
    if match.group(1) != kind or (isinstance(ident, str) and match.group(2) != ident):
        said = "fullUrl and the resource disagree on its type or id. Make both say the same."
        yield Issue("error", "value", "bundle-full-url", said, expression=node.expression)


def _request(node: Node, resource: Mapping[Any, Any], kind: str, edition: Edition) -> Iterator[Issue]:
    request = node.value.get("request")
    if not isinstance(request, Mapping):
        return
    method, url = request.get("method"), request.get("url")
    match = _REQUEST.fullmatch(url) if isinstance(url, str) else None
    if method not in ("POST", "PUT") or not match or match.group(1) not in edition.resources:
        return
    wrong = match.group(1) != kind
    ident = resource.get("id")
    if method == "PUT" and match.group(2) and isinstance(ident, str) and match.group(2) != ident:
        wrong = True
    if wrong:
        said = "request.url names another type or id than the resource has. Make both say the same."
        yield Issue("error", "value", "bundle-request", said, expression=node.expression)
