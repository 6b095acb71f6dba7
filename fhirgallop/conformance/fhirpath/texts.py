# ruff: noqa: ARG001 - all compiled code has one signature, whether it looks at everything or not
"""Functions on texts.

Source: FHIRPath N1 (v2.0.0), section 5.6; `matchesFull`, `trim`, `split`, `join`, `encode`, `decode`,
`escape` and `unescape` as FHIRPath v3.0.0 describes them.
"""

from __future__ import annotations

import base64
import binascii
import html
import json
from collections.abc import Callable, Mapping, Sequence

from fhirgallop.conformance.fhirpath import patterns
from fhirgallop.conformance.fhirpath.frame import Code, Frame
from fhirgallop.conformance.fhirpath.function import Body, Function, integer_argument, text_argument
from fhirgallop.conformance.fhirpath.items import CannotJudge, Collection, plain, singleton
from fhirgallop.conformance.fhirpath.operators import EMPTY, MAX_TEXT, boolean

Arguments = Sequence[Code]


def _subject(focus: Collection) -> str | None:
    """The text of the focus; dates and numbers are read as they print, as FHIR's own rules use them."""
    value = singleton(focus)
    if value is None or isinstance(value, str):
        return value
    if isinstance(value, bool) or not hasattr(value, "parts"):
        raise CannotJudge("a text function is used on something that is no text")
    return str(value)


def _with_text(work: Callable[[str, str], Collection]) -> Body:
    """A function of the focus and one text argument; empty when either is."""

    def run(focus: Collection, frame: Frame, args: Arguments) -> Collection:
        text = _subject(focus)
        other = text_argument(args[0], frame)
        return EMPTY if text is None or other is None else work(text, other)

    return run


def _on_text(work: Callable[[str], Collection]) -> Body:
    """A function of the focus alone; empty when it is."""

    def run(focus: Collection, frame: Frame, args: Arguments) -> Collection:
        text = _subject(focus)
        return EMPTY if text is None else work(text)

    return run


def _substring(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    text = _subject(focus)
    start = integer_argument(args[0], frame)
    length = integer_argument(args[1], frame) if len(args) > 1 else None
    if text is None or start is None or not 0 <= start < len(text):
        return EMPTY
    return [text[start:] if length is None else text[start : start + max(0, length)]]


def _replace(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    text, old, new = _subject(focus), text_argument(args[0], frame), text_argument(args[1], frame)
    if text is None or old is None or new is None:
        return EMPTY
    if (text.count(old) + 1) * len(new) > MAX_TEXT:
        raise CannotJudge("a text became too long")
    return [text.replace(old, new)]


def _replace_matches(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    text, pattern, new = _subject(focus), text_argument(args[0], frame), text_argument(args[1], frame)
    if text is None or pattern is None or new is None:
        return EMPTY
    return [patterns.replace(pattern, text, new)]


def _join(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    separator = (text_argument(args[0], frame) if args else "") or ""
    texts = [str(plain(item)) for item in focus if isinstance(plain(item), str)]
    return [separator.join(texts)] if texts else EMPTY


def _encode(text: str, form: str) -> Collection:
    raw = text.encode("utf-8", "replace")
    if form == "hex":
        return [raw.hex()]
    if form == "base64":
        return [base64.b64encode(raw).decode()]
    return [base64.urlsafe_b64encode(raw).decode()] if form == "urlbase64" else EMPTY


def _decode(text: str, form: str) -> Collection:
    try:
        if form == "hex":
            return [bytes.fromhex(text).decode()]
        if form == "base64":
            return [base64.b64decode(text, validate=True).decode()]
        return [base64.urlsafe_b64decode(text).decode()] if form == "urlbase64" else EMPTY
    except (ValueError, binascii.Error):
        return EMPTY


def _escape(text: str, form: str) -> Collection:
    if form == "html":
        return [html.escape(text)]
    return [json.dumps(text, ensure_ascii=False)[1:-1]] if form == "json" else EMPTY


def _unescape(text: str, form: str) -> Collection:
    if form == "html":
        return [html.unescape(text)]
    try:
        return [str(json.loads(f'"{text}"'))] if form == "json" else EMPTY
    except ValueError:
        return EMPTY


FUNCTIONS: Mapping[str, Function] = {
    "indexOf": Function(_with_text(lambda text, part: [text.find(part)]), 1, 1),
    "lastIndexOf": Function(_with_text(lambda text, part: [text.rfind(part)]), 1, 1),
    "substring": Function(_substring, 1, 2),
    "startsWith": Function(_with_text(lambda text, part: boolean(text.startswith(part))), 1, 1),
    "endsWith": Function(_with_text(lambda text, part: boolean(text.endswith(part))), 1, 1),
    "contains": Function(_with_text(lambda text, part: boolean(part in text)), 1, 1),
    "upper": Function(_on_text(lambda text: [text.upper()])),
    "lower": Function(_on_text(lambda text: [text.lower()])),
    "replace": Function(_replace, 2, 2),
    "matches": Function(_with_text(lambda text, pattern: boolean(patterns.found(pattern, text))), 1, 1),
    "matchesFull": Function(
        _with_text(lambda text, pattern: boolean(patterns.found(f"^(?:{pattern})$", text))), 1, 1
    ),
    "replaceMatches": Function(_replace_matches, 2, 2),
    "length": Function(_on_text(lambda text: [len(text)])),
    "toChars": Function(_on_text(list)),
    "trim": Function(_on_text(lambda text: [text.strip()])),
    "split": Function(_with_text(lambda text, part: list(text.split(part)) if part else list(text)), 1, 1),
    "join": Function(_join, 0, 1),
    "encode": Function(_with_text(_encode), 1, 1),
    "decode": Function(_with_text(_decode), 1, 1),
    "escape": Function(_with_text(_escape), 1, 1),
    "unescape": Function(_with_text(_unescape), 1, 1),
}
