"""Reads a resource as it came (bytes, text or parsed) strictly, and finds the line and column of any node.

Two speeds. `read` parses at full speed and proves cheaply that nothing was lost on the way (no key twice).
Only where that proof fails, or where exact decimals are asked for, is the exact reader used.
Source: RFC 8259 (JSON), FHIR "JSON representation of resources" (R4, R4B, R5).
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterable, Mapping
from decimal import Decimal
from typing import Any, NamedTuple

import orjson

from fhirgallop.conformance.scan import Path, odd_values, offsets, repeated_keys
from fhirgallop.outcome import Issue

MAX_BYTES = 256 * 1024 * 1024
MAX_DEPTH = 200
MAX_NUMBER = 1000
MAX_PARTS = 10_000_000
_BOM = b"\xef\xbb\xbf"
_LONE = re.compile("[\ud800-\udfff]")
_CURE_JSON = "Send one JSON object as UTF-8 text (RFC 8259)."


class Source(NamedTuple):
    """What was read.

    Attributes:
        value: the parsed JSON; None when it could not be read at all.
        text: the text it was read from; None when it came parsed.
        proved: True when it is certain that no key stands twice.
        same: True when the text is byte for byte the value written again, so that no digit was lost either.
        issues: what is wrong with the text itself; fatal ones mean there is no value.
    """

    value: Any
    text: bytes | None
    proved: bool
    same: bool = False
    issues: tuple[Issue, ...] = ()


def read(resource: object) -> Source:
    """Reads at full speed; decimals are floats. Never raises for what the resource holds."""
    if type(resource) is bytes:
        text = resource
    elif isinstance(resource, (bytes, bytearray, memoryview)):
        text = bytes(resource)
    elif isinstance(resource, (dict, Mapping)):
        return Source(resource, None, True)
    elif isinstance(resource, str):
        try:
            text = resource.encode()
        except UnicodeEncodeError:
            return _unreadable("json-surrogate", "The text holds half of a surrogate pair. " + _CURE_JSON)
    else:
        return _unreadable("json-object", "The resource is neither bytes, text nor an object. " + _CURE_JSON)
    if len(text) > MAX_BYTES:
        return _unreadable(
            "size-limit", f"The text is longer than {MAX_BYTES // 2**20} MB. Send it in parts."
        )
    try:
        value = orjson.loads(text)
    except ValueError:
        return exact(text)
    try:
        again = orjson.dumps(value)
    except TypeError:  # nested deeper than it writes
        return Source(value, text, False)
    return Source(value, text, True, True) if again == text else Source(value, text, _kept_all(text, again))


def exact(text: bytes) -> Source:
    """Reads with exact decimals and says all that is wrong with the text."""
    issues: list[Issue] = []
    if text.startswith(_BOM):
        text = text[len(_BOM) :]
        issues.append(
            Issue(
                "error",
                "structure",
                "json-bom",
                "The text starts with a byte order mark. Remove it.",
                line=1,
                column=1,
            )
        )
    try:
        decoded = text.decode()
    except UnicodeDecodeError as error:
        line, column = _position(text, error.start)
        said = "The text is not UTF-8 at this place. Send UTF-8 only."
        return Source(None, text, proved=False, issues=(*issues, _fatal("utf-8", said, line, column)))
    numbers = _Numbers()
    try:
        value = json.loads(
            decoded, parse_float=numbers.decimal, parse_int=numbers.integer, parse_constant=numbers.constant
        )
    except json.JSONDecodeError as error:
        line, column = error.lineno, error.colno
        said = f"This is not JSON: {_reason(error.msg)} at this place. {_CURE_JSON}"
        return Source(None, text, proved=False, issues=(*issues, _fatal("json-syntax", said, line, column)))
    except RecursionError:
        return Source(None, text, proved=False, issues=(*issues, too_deep()))
    if numbers.odd:
        said = f"No JSON number: NaN, an infinity or over {MAX_NUMBER} characters. Write a shorter one."
        issues.append(Issue("error", "value", "json-number", said))
    if r"\u" in decoded and has_lone_surrogate(value):
        said = "A text holds half of a surrogate pair. Write whole characters."
        issues.append(Issue("error", "value", "json-surrogate", said))
    return Source(value, text, proved=False, issues=tuple(issues))


def too_deep() -> Issue:
    """The issue for nesting beyond what is judged."""
    return _fatal(
        "depth-limit", f"The resource is nested deeper than {MAX_DEPTH} levels. Make it flatter.", 0, 0
    )


def deeper_than_limit(value: Any) -> bool:
    """Whether objects and arrays are nested beyond the limit, in a circle, or more than can be judged."""
    level: list[Any] = [value]
    total = 0
    for _ in range(MAX_DEPTH):
        below: list[Any] = []
        for item in level:
            inner = item.values() if isinstance(item, Mapping) else item
            below.extend(v for v in inner if isinstance(v, (dict, list)) and v)
        if not below:
            return False
        level = below
        total += len(below)
        if total > MAX_PARTS:
            return True
    return True


def has_lone_surrogate(value: Any) -> bool:
    """Whether any text or key holds half of a surrogate pair, without recursion."""
    stack = [value]
    while stack:
        item = stack.pop()
        if isinstance(item, str):
            if _LONE.search(item):
                return True
        elif isinstance(item, Mapping):
            stack.extend(item.keys())
            stack.extend(item.values())
        elif isinstance(item, list):
            stack.extend(item)
    return False


def duplicates(text: bytes) -> list[tuple[Path, int, int]]:
    """Path of each object that holds a key twice, with line and column of the later key."""
    text = text.removeprefix(_BOM)
    found = repeated_keys(text)
    places = _positions(text, (offset for _, offset in found))
    return [(path, *places[offset]) for path, offset in found]


def odd(text: bytes, rule: str) -> list[tuple[Path, int, int]]:
    """Path, line and column of each value with an issue of the text itself: a number, half a surrogate."""
    text = text.removeprefix(_BOM)
    found = odd_values(text, _is_odd_number if rule == "json-number" else _is_half_a_pair)
    places = _positions(text, (offset for _, offset in found))
    return [(path, *places[offset]) for path, offset in found]


def _is_odd_number(token: bytes) -> bool:
    return token in (b"NaN", b"Infinity", b"-Infinity") or (token[:1] != b'"' and len(token) > MAX_NUMBER)


def _is_half_a_pair(token: bytes) -> bool:
    return b"\\u" in token and _LONE.search(json.loads(token)) is not None


def locate(text: bytes, paths: Iterable[Path]) -> dict[Path, tuple[int, int]]:
    """Line and column (from 1) of the value at each path, in one pass over the text."""
    text = text.removeprefix(_BOM)
    found = offsets(text, paths)
    places = _positions(text, found.values())
    return {path: places[offset] for path, offset in found.items()}


def _kept_all(text: bytes, again: bytes) -> bool:
    r"""Whether it is proved that no key was lost in reading a text, given the value written again.

    A text that equals it has lost nothing. Else: a lost key takes at least two quotation marks with it, so as
    many marks in the text as in the value written again means that none is lost; `\u0022` could hide a mark
    and ends the proof.
    """
    return b"\\u" not in text and text.count(b'"') == again.count(b'"')


def _unreadable(rule: str, said: str) -> Source:
    return Source(None, None, proved=False, issues=(_fatal(rule, said, 0, 0),))


def _fatal(rule: str, said: str, line: int, column: int) -> Issue:
    return Issue("fatal", "structure", rule, said, line=line, column=column)


def _reason(message: str) -> str:
    """The decoder's words, without anything from the text."""
    return message.partition(":")[0].lower()


def _position(text: bytes, offset: int) -> tuple[int, int]:
    return _positions(text, [offset])[offset]


def _positions(text: bytes, offsets: Iterable[int]) -> dict[int, tuple[int, int]]:
    """Line and column (in characters, from 1) of byte offsets, counted forward once over the text."""
    found: dict[int, tuple[int, int]] = {}
    line, at, column = 1, 0, 1
    for offset in sorted(set(offsets)):
        line += text.count(b"\n", at, offset)
        start = text.rfind(b"\n", at, offset) + 1
        if start:
            at, column = start, 1
        column += len(text[at:offset].decode(errors="replace"))
        at = offset
        found[offset] = (line, column)
    return found


class _Numbers:
    """Reads numbers exactly and notes whether any is no JSON number or beyond all reason."""

    def __init__(self) -> None:
        self.odd = False

    def decimal(self, digits: str) -> Decimal:
        return Decimal(0) if self._too_long(digits) else Decimal(digits)

    def integer(self, digits: str) -> int:
        return 0 if self._too_long(digits) else int(digits)

    def constant(self, _word: str) -> Decimal:
        self.odd = True
        return Decimal(0)

    def _too_long(self, digits: str) -> bool:
        self.odd |= len(digits) > MAX_NUMBER
        return len(digits) > MAX_NUMBER
