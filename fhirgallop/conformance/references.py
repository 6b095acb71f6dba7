"""Clause: references: their form, and whether the target is of a type allowed.

Relative, absolute, versioned, contained (`#id`) and in-bundle references are followed as far as the
resource itself reaches; nothing is fetched. Source: FHIR "References between resources", "Bundle, resolving
references" (R4, R4B, R5).
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator, Mapping
from typing import Any

from fhirgallop.conformance.editions import Edition
from fhirgallop.conformance.node import Node, Scope, contained_ids
from fhirgallop.conformance.wording import one_of
from fhirgallop.outcome import Issue

_LITERAL = re.compile(
    r"(?:https?://[^\s?#]*/)?([A-Z][A-Za-z]{1,63})/[A-Za-z0-9.-]{1,64}(?:/_history/[A-Za-z0-9.-]{1,64})?(?:#\S*)?",
    re.ASCII,
)
_BASE = re.compile(r"(https?://\S+?)/[A-Z][A-Za-z]{1,63}/[A-Za-z0-9.-]{1,64}(?:/_history/\S*)?", re.ASCII)
_VERSION = re.compile(r"/_history/[A-Za-z0-9.-]{1,64}$", re.ASCII)

Resolve = Callable[[Node, str], Node | None]


def resolver(root: Node, edition: Edition) -> Resolve:
    """Looks references up among contained resources and the entries of the Bundle, built at first use."""
    return _Index(root, edition).resolve


def scope_of(root: Node, edition: Edition) -> Scope:
    """What rules may ask about the resource handed in; its indices are built at first use."""
    index = _Index(root, edition)
    return Scope(edition, root, index.resolve, index.contained_ids)


class _Index:
    """Contained resources by container and id, Bundle entries by fullUrl."""

    def __init__(self, root: Node, edition: Edition) -> None:
        self._root = root
        self._edition = edition
        self._contained: dict[int, dict[str, Node]] = {}
        self._ids: dict[int, frozenset[str]] = {}
        self._entries: dict[int, dict[str, Node]] = {}

    def resolve(self, node: Node, reference: str) -> Node | None:
        container = node.root_resource
        if reference.startswith("#"):
            if reference == "#":
                return container
            return self._contained_of(container).get(reference[1:])
        around = container.parent
        entry: Node | None = container
        while around is not None:
            if around.type_name == "Bundle":
                found = self._find(around, entry, reference)
                if found is not None:
                    return found
            entry, around = (
                (around, around.parent) if around.type_name == "Bundle.entry" else (entry, around.parent)
            )
        return self._find(self._root, None, reference) if self._root.type_name == "Bundle" else None

    def contained_ids(self, container: Node) -> frozenset[str]:
        found = self._ids.get(id(container.value))
        if found is None:
            found = self._ids[id(container.value)] = contained_ids(container)
        return found

    def _find(self, bundle: Node, entry: Node | None, reference: str) -> Node | None:
        entries = self._entries_of(bundle)
        plain = reference.partition("#")[0]
        for candidate in (plain, _VERSION.sub("", plain)):
            if candidate in entries:
                return entries[candidate]
        if (
            entry is not None
            and entry.type_name == "Bundle.entry"
            and "://" not in plain
            and not plain.startswith("urn:")
        ):
            base = _BASE.fullmatch(str(entry.value.get("fullUrl", "")))
            if base:
                return entries.get(f"{base.group(1)}/{_VERSION.sub('', plain)}")
        return None

    def _contained_of(self, container: Node) -> dict[str, Node]:
        found = self._contained.get(id(container.value))
        if found is None:
            found = self._contained[id(container.value)] = {}
            for child in self._resources(container, "contained", container.value.get("contained")):
                ident = child.value.get("id")
                if isinstance(ident, str):
                    found.setdefault(ident, child)
        return found

    def _entries_of(self, bundle: Node) -> dict[str, Node]:
        found = self._entries.get(id(bundle.value))
        if found is None:
            found = self._entries[id(bundle.value)] = {}
            place = self._edition.child("Bundle", "entry")
            entries = bundle.value.get("entry")
            for index, entry in enumerate(entries if isinstance(entries, list) else ()):
                if (
                    place is None
                    or not isinstance(entry, Mapping)
                    or not isinstance(entry.get("fullUrl"), str)
                ):
                    continue
                holder = bundle.child(entry, None, place, "entry", index)
                for child in self._resources(holder, "resource", [entry.get("resource")], many=False):
                    found.setdefault(entry["fullUrl"], child)
        return found

    def _resources(self, holder: Node, key: str, values: Any, *, many: bool = True) -> Iterator[Node]:
        place = self._edition.child(holder.type_name, key)
        for index, value in enumerate(values if isinstance(values, list) else ()):
            if place is not None and isinstance(value, Mapping):
                kind = value.get("resourceType")
                if isinstance(kind, str) and kind in self._edition.resources:
                    child = holder.child(value, None, place, key, index if many else None)
                    child.as_resource(kind)
                    yield child


def check(node: Node, edition: Edition, resolve: Resolve) -> Iterator[Issue]:
    """Issues of one Reference, or of one canonical that points to a contained resource."""
    if node.type_name == "Reference":
        targets = _targets(node)
        reference = node.value.get("reference")
        if isinstance(reference, str) and reference:
            yield from _literal(node, reference, targets, edition, resolve)
        said = node.value.get("type")
        if isinstance(said, str) and said in edition.resources and not allowed(said, targets, edition):
            yield _wrong_target(node, targets, "the type that this reference names")
    elif node.type_name == "canonical" and isinstance(node.value, str) and node.value.startswith("#"):
        target = resolve(node, node.value)
        if target is None:
            said = "No contained resource has the id that stands behind '#'. Add it, or correct the id."
            yield Issue("error", "not-found", "canonical-contained", said, expression=node.expression)
        targets = (
            next((t.targets for t in node.element.types if t.code == "canonical"), ()) if node.element else ()
        )
        if target is not None and not allowed(target.type_name, targets, edition):
            yield _wrong_target(node, targets, "the contained resource meant here")


def target_type(node: Node, reference: str, edition: Edition, resolve: Resolve) -> str:
    """Type of the resource meant: the target's own if within reach, else as written; "" if unknown."""
    target = resolve(node, reference)
    if target is not None:
        return target.type_name
    literal = _LITERAL.fullmatch(reference)
    return literal.group(1) if literal and literal.group(1) in edition.resources else ""


def allowed(kind: str, targets: tuple[str, ...], edition: Edition) -> bool:
    """Whether a resource type is among the targets; a target that is a profile cannot exclude by its name."""
    return not targets or any("/" in t or edition.is_a(kind, t) for t in targets)


def _literal(
    node: Node, reference: str, targets: tuple[str, ...], edition: Edition, resolve: Resolve
) -> Iterator[Issue]:
    target = resolve(node, reference)
    if target is not None:
        if not allowed(target.type_name, targets, edition):
            yield _wrong_target(node, targets, "the resource meant here")
        said = node.value.get("type")
        if isinstance(said, str) and said in edition.resources and said != target.type_name:
            text = "The reference names another type than its target has. Correct 'type'."
            yield Issue("error", "value", "reference-type", text, expression=node.expression)
        return
    if reference.startswith(("#", "urn:")):
        return
    literal = _LITERAL.fullmatch(reference)
    if literal and literal.group(1) in edition.resources:
        if not allowed(literal.group(1), targets, edition):
            yield _wrong_target(node, targets, "the type in the address")
    elif "://" not in reference and not _is_search(reference):
        text = "This is no reference: it must be Type/id, an absolute URL, a urn or #id. Correct it."
        yield Issue("error", "value", "reference-format", text, expression=node.expression)


def _is_search(reference: str) -> bool:
    """A conditional reference of a transaction: `Patient?identifier=...`."""
    return "?" in reference


def _targets(node: Node) -> tuple[str, ...]:
    element = node.element
    if element is None:
        return ()
    own = tuple(t for ref in element.types if ref.code == "Reference" for t in ref.targets)
    if (
        not own
        and node.parent is not None
        and node.parent.type_name == "CodeableReference"
        and node.parent.element
    ):
        own = tuple(
            t for ref in node.parent.element.types if ref.code == "CodeableReference" for t in ref.targets
        )
    return own


def _wrong_target(node: Node, targets: tuple[str, ...], what: str) -> Issue:
    said = f"A reference here may point to {one_of(targets)} only; {what} is another. Point to one of these."
    return Issue("error", "structure", "reference-target", said, expression=node.expression)
