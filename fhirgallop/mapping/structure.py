"""Holds a map's tree against the grammar: unknown keys, missing keys, wrong kinds.

What does not conform is noted and left out, so that the rest can be read on and every fault is found at once.
"""

from __future__ import annotations

import re

from fhirgallop.mapping.document import Items, Node, Pairs, Scalar, clip
from fhirgallop.mapping.faults import Faults
from fhirgallop.mapping.grammar import Either, Group, ListOf, Shape, TableOf, Word, resolved


def conforming(node: Node, shape: Shape, name: str, faults: Faults) -> Node | None:
    """`node` without what does not conform to `shape`; None when nothing of it does."""
    shape = resolved(shape)
    match shape:
        case Word():
            return _word(node, shape, name, faults)
        case ListOf():
            return _list(node, shape, name, faults)
        case TableOf():
            return _table(node, shape, name, faults)
        case Group():
            return _group(node, shape, name, faults)
        case Either():
            if isinstance(node, Scalar):
                return _word(node, shape.short, name, faults)
            return conforming(node, shape.long, name, faults)
    raise AssertionError(shape)  # pragma: no cover  (every shape stands above)


def _word(node: Node, shape: Word, name: str, faults: Faults) -> Node | None:
    if not isinstance(node, Scalar):
        _wrong_kind(node, name, "a single text", faults, shape.about)
        return None
    if node.is_empty or not node.text.strip():
        text = f"{name} is empty; write its value after the colon, or remove the key."
        faults.add(node.line, "map-empty", text, column=node.column)
        return None
    if shape.words and node.text not in shape.words:
        known = ", ".join(shape.words)
        text = (
            f"{name} cannot be {clip(node.text)}; it is one of: {known}.{faults.near(node.text, shape.words)}"
        )
        faults.add(node.line, "map-unknown-word", text, code="code-invalid", column=node.column)
        return None
    if shape.pattern and not re.fullmatch(shape.pattern, node.text, re.ASCII):
        text = f"{name} is not written as it must be. {shape.about}"
        faults.add(node.line, "map-form", text, code="value", column=node.column)
        return None
    return node


def _list(node: Node, shape: ListOf, name: str, faults: Faults) -> Node | None:
    if not isinstance(node, Items):
        _wrong_kind(node, name, "a list (each entry on a line that starts with '- ', or [a, b])", faults)
        return None
    if shape.exactly and len(node.items) != shape.exactly:
        text = f"{name} needs exactly {shape.exactly} entries, as in [2014-07, 2014-08]."
        faults.add(node.line, "map-form", text, column=node.column)
        return None
    if not node.items:
        faults.add(
            node.line, "map-empty", f"{name} is an empty list; fill it or remove the key.", column=node.column
        )
        return None
    each = resolved(shape.each)
    inner = each.name if isinstance(each, Group) else f"an entry of {name}"
    kept = [good for item in node.items if (good := conforming(item, each, inner, faults))]
    return Items(tuple(kept), node.line, node.column) if kept else None


def _table(node: Node, shape: TableOf, name: str, faults: Faults) -> Node | None:
    if not isinstance(node, Pairs):
        _wrong_kind(node, name, "a table of 'wording: meaning'", faults)
        return None
    kept = [
        (key, good)
        for key, value in node.items
        if (good := conforming(value, shape.each, f"{name}, {clip(key.text)}", faults))
    ]
    return Pairs(tuple(kept), node.line, node.column)


def _group(node: Node, shape: Group, name: str, faults: Faults) -> Node | None:
    keys = [key.name for key in shape.keys]
    if not isinstance(node, Pairs):
        _wrong_kind(node, name, f"a group with the keys {', '.join(keys)}", faults)
        return None
    kept = []
    refused = set()
    for key, value in node.items:
        known = shape.key(key.text)
        if known is None:
            text = (
                f"{clip(key.text)} is not a key of {name}; there are: {', '.join(keys)}."
                f"{faults.near(key.text, keys, count=1)}"
            )
            faults.add(key.line, "map-unknown-key", text, column=key.column)
            refused.add(key.text)
        elif good := conforming(value, known.shape, known.name, faults):
            kept.append((key, good))
        else:
            refused.add(key.text)
    written = {key.text for key, _ in node.items}
    for known in shape.keys:
        if known.required and known.name not in written:
            text = f"{name} lacks the key {known.name}; add it.{_about(known.shape)}"
            faults.add(node.line, "map-missing-key", text, code="required", column=node.column)
    if shape.one_of and written.isdisjoint(shape.one_of):
        text = f"{name} needs one of the keys {', '.join(shape.one_of)}; add one of them."
        faults.add(node.line, "map-missing-key", text, code="required", column=node.column)
    return Pairs(tuple(kept), node.line, node.column, frozenset(refused))


def _about(shape: Shape) -> str:
    about = getattr(resolved(shape), "about", "")
    return f" {about}" if about else ""


def _wrong_kind(node: Node, name: str, wanted: str, faults: Faults, about: str = "") -> None:
    found = {Scalar: "a single text", Items: "a list", Pairs: "a group of keys"}[type(node)]
    cure = f" {about}" if about else ""
    if isinstance(node, Scalar) and re.search(r":\S", node.text):
        cure = " Write a blank after each colon, as in 'field: s4'."
    text = f"{name} must be {wanted}, but {found} stands here.{cure}"
    faults.add(node.line, "map-wrong-kind", text, column=node.column)
