"""YAML text as a tree of nodes that know their lines; every scalar stays the text that was written.

Source: YAML 1.2.2. Left out on purpose: anchors, aliases, tags and several documents in one text. Since
scalars stay text, `yes`, `1.0` and `2026.1` mean exactly what stands in the map.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, Final

from ruamel.yaml import YAML
from ruamel.yaml.error import MarkedYAMLError, YAMLError
from ruamel.yaml.events import (
    AliasEvent,
    DocumentStartEvent,
    MappingEndEvent,
    MappingStartEvent,
    ScalarEvent,
    SequenceEndEvent,
    SequenceStartEvent,
)

from fhirgallop.mapping.faults import Faults

MAX_BYTES: Final = 512 * 1024
MAX_DEPTH: Final = 16
MAX_NODES: Final = 60_000
_BOM: Final = "\ufeff"


@dataclass(frozen=True, slots=True)
class Scalar:
    """A single text; `plain` when it was written without quotes."""

    text: str
    plain: bool
    line: int
    column: int

    @property
    def is_empty(self) -> bool:
        """True where nothing (or an explicit null) was written."""
        return self.plain and self.text in ("", "~", "null")


@dataclass(frozen=True, slots=True)
class Items:
    """A list."""

    items: tuple[Node, ...]
    line: int
    column: int


@dataclass(frozen=True, slots=True)
class Pairs:
    """Keys with their values, in the order written.

    `refused` are the keys that were written but left out, because their values do not conform: whoever misses
    one of them need not say so again.
    """

    items: tuple[tuple[Scalar, Node], ...]
    line: int
    column: int
    refused: frozenset[str] = frozenset()

    def get(self, key: str) -> Node | None:
        """The value of `key`."""
        return next((value for name, value in self.items if name.text == key), None)


Node = Scalar | Items | Pairs


class _StopError(Exception):
    """Reading cannot go on; the fault has been noted."""


def parse(text: str | bytes, faults: Faults) -> Node | None:
    """The tree of a map's text, or None when it is no readable YAML; what is wrong goes into `faults`."""
    if len(text) > MAX_BYTES:
        faults.add(
            0,
            "map-too-large",
            f"The map is larger than {MAX_BYTES:,} bytes; split the form into several maps.",
            code="too-long",
        )
        return None
    if isinstance(text, bytes):
        try:
            text = text.decode("utf-8")
        except UnicodeDecodeError as error:
            line = error.object.count(b"\n", 0, error.start) + 1
            faults.add(line, "map-not-utf8", "The map is not UTF-8; save it as UTF-8 in your editor.")
            return None
    yaml = YAML(typ="safe", pure=True)
    try:
        return _Builder(faults).build(yaml.parse(text.removeprefix(_BOM)))
    except _StopError:
        return None
    except MarkedYAMLError as error:
        mark = error.problem_mark or error.context_mark
        line, column = (mark.line + 1, mark.column + 1) if mark else (0, 0)
        faults.add(
            line,
            "map-yaml",
            f"This is not readable YAML: {error.problem or error.context}. {_cure(str(error.problem))}",
            column=column,
        )
    except (YAMLError, ValueError, OverflowError, IndexError, AttributeError, AssertionError):
        # The YAML library answers some malformed texts (control characters, broken escapes) with these.
        faults.add(
            0, "map-yaml", "The text holds a character or an escape that YAML does not allow; remove it."
        )
    return None


def _cure(problem: str) -> str:
    if "mapping values" in problem:
        return 'Put a text that holds a colon between double quotes, such as "Recording locations:".'
    if "\\t" in problem or "tab" in problem:
        return "Indent with spaces, not with tabs."
    return (
        "Look at the indentation and the closing brackets here and in the line before. A text that starts "
        "with one of & * ? | > % @ ! or holds a colon, a comma or a bracket, such as mm[Hg], stands between "
        "double quotes."
    )


class _Builder:
    """Turns the parser's events into nodes, without recursion, so that depth is bounded by us."""

    def __init__(self, faults: Faults) -> None:
        self._faults = faults
        self._open: list[tuple[Any, list[Node]]] = []
        self._root: Node | None = None
        self._count = 0
        self._documents = 0

    def build(self, events: Iterator[Any]) -> Node | None:
        for event in events:
            match event:
                case DocumentStartEvent():
                    self._documents += 1
                    if self._documents > 1:
                        self._stop(
                            event, "map-several-documents", "A map is one document; remove the line ---."
                        )
                case AliasEvent():
                    self._refuse_anchor(event)
                case ScalarEvent():
                    self._check(event)
                    line, column = _place(event)
                    self._put(Scalar(event.value, event.style is None, line, column))
                case MappingStartEvent() | SequenceStartEvent():
                    self._check(event)
                    if len(self._open) >= MAX_DEPTH:
                        self._stop(
                            event, "map-too-deep", f"The map is nested deeper than {MAX_DEPTH} levels."
                        )
                    self._open.append((event, []))
                case MappingEndEvent() | SequenceEndEvent():
                    self._close()
        return self._root

    def _close(self) -> None:
        start, nodes = self._open.pop()
        line, column = _place(start)
        if isinstance(start, SequenceStartEvent):
            self._put(Items(tuple(nodes), line, column))
            return
        pairs: dict[str, tuple[Scalar, Node]] = {}
        for key, value in zip(nodes[::2], nodes[1::2], strict=True):
            if not isinstance(key, Scalar):
                self._faults.add(key.line, "map-yaml", "A key must be a single text, not a list or a group.")
            elif key.text in pairs:
                text = (
                    f"{clip(key.text)} stands twice in one group (first in line "
                    f"{pairs[key.text][0].line}); keep one."
                )
                self._faults.add(key.line, "map-duplicate-key", text, column=key.column)
            else:
                pairs[key.text] = (key, value)
        self._put(Pairs(tuple(pairs.values()), line, column))

    def _put(self, node: Node) -> None:
        if self._open:
            self._open[-1][1].append(node)
        else:
            self._root = node

    def _check(self, event: Any) -> None:
        self._count += 1
        if self._count > MAX_NODES:
            self._stop(event, "map-too-large", f"The map has more than {MAX_NODES:,} entries.")
        if event.anchor is not None:
            self._refuse_anchor(event)
        if event.tag is not None:
            self._stop(
                event,
                "map-yaml-tag",
                "Tags (a word that starts with !) are not used in a map; remove it, "
                "or put the text between double quotes.",
            )

    def _refuse_anchor(self, event: Any) -> None:
        self._stop(
            event,
            "map-yaml-anchor",
            "Anchors (&name) and aliases (*name) are not used in a map: write the "
            "part out, or put a text that starts with & or * between double quotes.",
        )

    def _stop(self, event: Any, rule: str, text: str) -> None:
        line, column = _place(event)
        self._faults.add(line, rule, text, column=column)
        raise _StopError


def clip(word: str) -> str:
    """A word of the map, quoted and short enough for a message."""
    plain = " ".join(word.split())
    return f"'{plain[:60]}…'" if len(plain) > 60 else f"'{plain}'"


def _place(event: Any) -> tuple[int, int]:
    return event.start_mark.line + 1, event.start_mark.column + 1
