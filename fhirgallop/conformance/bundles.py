"""Clause: Bundles beside the invariants bdl-*: what fullUrl, request and resource say of one another.

Source: FHIR Bundle and "RESTful API, transaction" (R4, R4B, R5).
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator, Mapping
from typing import Any

from fhirgallop.conformance.editions import Edition
from fhirgallop.conformance.node import Node
from fhirgallop.outcome import Issue

_REST = re.compile(r"https?://\S+?/([A-Z][A-Za-z]{1,63})/([A-Za-z0-9.-]{1,64})", re.ASCII)
_REQUEST = re.compile(
    r"(?:https?://[^\s?]*/)?([A-Z][A-Za-z]{1,63})(?:/([A-Za-z0-9.-]{1,64}))?(\?\S*)?", re.ASCII
)
_ABSOLUTE = re.compile(r"[A-Za-z][A-Za-z0-9+.-]*:\S+", re.ASCII)


def check(node: Node, edition: Edition) -> Iterator[Issue]:
    """Issues of one Bundle.entry."""
    url = node.value.get("fullUrl")
    if isinstance(url, str) and url and not _ABSOLUTE.fullmatch(url):
        said = "fullUrl must be absolute: a URL of the resource, or urn:uuid. Write it in full."
        yield Issue("error", "value", "bundle-full-url", said, expression=node.expression)
    bundle = node.parent
    asks = bundle is not None and bundle.value.get("type") in ("transaction", "batch")
    resource = node.value.get("resource")
    if not isinstance(resource, Mapping):
        if asks and edition.name != "R5":  # R5 has bdl-3c for it
            yield from _missing(node)
        return
    kind = resource.get("resourceType")
    if not isinstance(kind, str) or kind not in edition.resources:
        return
    yield from _full_url(node, resource, kind, edition)
    if asks:
        yield from _request(node, resource, kind, edition)


def check_reference(node: Node, resolve: Callable[[Node, str], Node | None]) -> Iterator[Issue]:
    """The issue of a Reference in the Composition of a document that leads out of the document.

    Source: FHIR Composition, "any other resources referenced from Composition must be included as subsequent
    entries in the Bundle" (R4, R4B, R5).
    """
    composition = node.resource
    entry = composition.parent
    if composition.type_name != "Composition" or entry is None or entry.parent is None or entry.index != 0:
        return
    reference = node.value.get("reference")
    if entry.parent.value.get("type") != "document" or not isinstance(reference, str) or not reference:
        return
    if not reference.startswith("#") and resolve(node, reference) is None:
        said = (
            "A document must hold every resource that its Composition refers to. Add an entry for this one."
        )
        yield Issue("warning", "not-found", "bundle-document", said, expression=node.expression)


def _missing(node: Node) -> Iterator[Issue]:
    request = node.value.get("request")
    if isinstance(request, Mapping) and request.get("method") in ("POST", "PUT"):
        said = "A POST or PUT needs the resource that is to be written. Add it."
        yield Issue("error", "required", "bundle-request", said, expression=node.expression)


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
    if (method == "PUT") != bool(match.group(2) or match.group(3)):
        said = (
            "A PUT names one resource (Type/id, or Type?search), a POST the type alone. Correct request.url."
        )
        yield Issue("error", "value", "bundle-request", said, expression=node.expression)
        return
    wrong = match.group(1) != kind
    ident = resource.get("id")
    if method == "PUT" and match.group(2) and isinstance(ident, str) and match.group(2) != ident:
        wrong = True
    if wrong:
        said = "request.url names another type or id than the resource has. Make both say the same."
        yield Issue("error", "value", "bundle-request", said, expression=node.expression)
