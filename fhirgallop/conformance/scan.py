"""Walks JSON text token by token, for what a parser does not keep: places, and keys written twice.

The text has been parsed before, so it is known to be well-formed. One pass, no recursion.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Iterator
from typing import Any

import orjson

Path = tuple[str | int, ...]

_TOKEN = re.compile(rb'"[^"\\]*(?:\\.[^"\\]*)*"|[\[\]{},:]|[^\s"\[\]{},:]+', re.DOTALL)


def offsets(text: bytes, paths: Iterable[Path]) -> dict[Path, int]:
    """Byte offset of the value at each path; a path that is not there is left out."""
    wanted: dict[Any, Any] = {}
    for path in paths:
        place = wanted
        for step in path:
            place = place.setdefault(step, {})
        place[None] = path
    found: dict[Path, int] = {}
    # one entry an open object or array: (whether an object, what is wanted inside it)
    stack: list[tuple[bool, dict[Any, Any]]] = []
    inside: list[int] = []
    here: dict[Any, Any] = wanted
    for kind, offset, key in _values(text):
        if kind == "close":
            stack.pop()
            inside.pop()
            continue
        if stack:
            is_object, around = stack[-1]
            if is_object:
                here = around.get(key, {})
            else:
                here = around.get(inside[-1], {})
                inside[-1] += 1
        if None in here:
            found.setdefault(here[None], offset)
        if kind != "plain":
            stack.append((kind == "object", here))
            inside.append(0)
    return found


def repeated_keys(text: bytes) -> list[tuple[Path, int]]:
    """Path of each object in which a key stands twice, with the offset of the later key's value."""
    found: list[tuple[Path, int]] = []
    stack: list[set[str] | int] = []
    path: list[str | int] = []
    for kind, offset, key in _values(text):
        if kind == "close":
            stack.pop()
            if path:
                path.pop()
            continue
        if stack:
            top = stack[-1]
            if isinstance(top, set):
                if key in top:
                    found.append((tuple(path), offset))
                top.add(key)
                step: str | int = key
            else:
                step = top
                stack[-1] = top + 1
        if kind != "plain":
            if stack:
                path.append(step)
            stack.append(set() if kind == "object" else 0)
    return found


def odd_values(text: bytes, is_odd: Callable[[bytes], bool]) -> list[tuple[Path, int]]:
    """Path and offset of each text, number or word, as written, that is odd; in the order of the text."""
    found: list[tuple[Path, int]] = []
    path: list[str | int] = []
    # one entry an open object (-1) or array (index of the next item)
    inside: list[int] = []
    step: str | int = ""
    for kind, offset, key in _values(text):
        if kind == "close":
            inside.pop()
            if path:
                path.pop()
            continue
        if inside:
            step = key if inside[-1] < 0 else inside[-1]
            inside[-1] += inside[-1] >= 0
        if kind == "plain":
            token = _TOKEN.match(text, offset)
            if token is not None and is_odd(token.group()):
                found.append(((*path, step) if inside else (), offset))
            continue
        if inside:
            path.append(step)
        inside.append(-1 if kind == "object" else 0)
    return found


def _values(text: bytes) -> Iterator[tuple[str, int, str]]:
    """Each value in order: kind (object, array, plain, close), offset, and the key it stands under."""
    objects: list[bool] = []
    key: bytes | None = None
    for match in _TOKEN.finditer(text):
        token = match.group()
        first = token[:1]
        if first in b",:":
            continue
        if first in b"]}":
            objects.pop()
            yield "close", match.start(), ""
        elif first in b"[{":
            yield ("object" if first == b"{" else "array"), match.start(), _name(key)
            objects.append(first == b"{")
            key = None
        elif objects and objects[-1] and key is None:
            key = token
        else:
            yield "plain", match.start(), _name(key)
            key = None


def _name(token: bytes | None) -> str:
    if token is None:
        return ""
    if b"\\" not in token:
        return token[1:-1].decode(errors="replace")
    try:
        return str(orjson.loads(token))
    except ValueError:
        return token[1:-1].decode(errors="replace")
