"""Exact JSON: what is read is what was written, and 1.20 stays 1.20 on the way out.

Sources: RFC 8259 (JSON); FHIR R4 "JSON representation" (UTF-8, no duplicate names, decimals keep precision).
"""

from __future__ import annotations

import json
from decimal import Decimal
from typing import Any, Final

import msgspec

from fhirgallop.outcome import Issue

MAX_BYTES: Final = 64 * 1024 * 1024
MAX_DIGITS: Final = 400
_BOM: Final = b"\xef\xbb\xbf"

_encode = msgspec.json.Encoder(decimal_format="number").encode


def write(value: Any) -> bytes:
    """UTF-8 JSON of plain dictionaries, lists, strings, numbers; a Decimal keeps its digits."""
    return _encode(value)


def pretty(value: Any) -> bytes:
    """The same, indented by two spaces, for people."""
    return msgspec.json.format(_encode(value), indent=2)


class _FaultError(ValueError):
    """Carries one issue out of the parser's call-backs."""

    def __init__(self, issue: Issue) -> None:
        self.issue = issue
        super().__init__(issue.text)


def read(text: bytes | str, *, max_bytes: int = MAX_BYTES, source: str = "") -> tuple[Any, list[Issue]]:
    """Strict, exact JSON value of `text`, and what was wrong with it.

    Numbers with a fraction or an exponent come as Decimal, whole numbers as int. The value is None when an
    issue is fatal.
    """
    issues: list[Issue] = []
    try:
        return _parse(_decoded(text, max_bytes, issues)), issues
    except _FaultError as fault:
        issues.append(fault.issue)
    except json.JSONDecodeError as error:
        issues.append(
            Issue("fatal", "structure", "json-syntax", f"This is not JSON: {error.msg}.",
                  line=error.lineno, column=error.colno)
        )  # fmt: skip
    except RecursionError:
        issues.append(
            Issue(
                "fatal", "too-long", "json-too-deep", "Arrays and objects are nested too deep; flatten them."
            )
        )
    if source:
        issues = [_at(issue, source) for issue in issues]
    return None, issues


def _decoded(text: bytes | str, max_bytes: int, issues: list[Issue]) -> str:
    if len(text) > max_bytes:
        message = f"The text is larger than {max_bytes:,} bytes; send it in smaller parts."
        raise _FaultError(Issue("fatal", "too-long", "json-too-large", message))
    if isinstance(text, str):
        return text.removeprefix("\ufeff")
    if text.startswith(_BOM):
        message = "The text starts with a byte-order mark; it was skipped. Send UTF-8 without it."
        issues.append(Issue("warning", "structure", "json-byte-order-mark", message))
        text = text[len(_BOM) :]
    try:
        return text.decode()
    except UnicodeDecodeError as error:
        message = "The text is not UTF-8; save or send it as UTF-8."
        line = text.count(b"\n", 0, error.start) + 1
        raise _FaultError(Issue("fatal", "structure", "json-not-utf8", message, line=line)) from None


def _parse(text: str) -> Any:
    value = _DECODER.decode(text)
    # A lone surrogate cannot be written as UTF-8 again; only an escape can have brought one in.
    if "\\ud" in text or "\\uD" in text:
        try:
            write(value)
        except UnicodeEncodeError:
            message = "A \\u escape names half a character (a lone surrogate); send whole characters."
            raise _FaultError(Issue("fatal", "structure", "json-lone-surrogate", message)) from None
    return value


def _object(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) != len(pairs):
        names = [name for name, _ in pairs]
        twice = next(name for name in names if names.count(name) > 1)
        message = f"The name {twice[:64]!r} occurs twice in one object; keep one of them."
        raise _FaultError(Issue("fatal", "structure", "json-duplicate-key", message, field=twice[:64]))
    return found


def _constant(name: str) -> Any:
    message = f"{name} is not a JSON number; leave the member out instead."
    raise _FaultError(Issue("fatal", "structure", "json-not-a-number", message))


def _whole(digits: str) -> int:
    _measured(digits)
    return int(digits)


def _fraction(digits: str) -> Decimal:
    _measured(digits)
    return Decimal(digits)


def _measured(digits: str) -> None:
    if len(digits) > MAX_DIGITS:
        message = f"A number has more than {MAX_DIGITS} characters; send it with fewer digits."
        raise _FaultError(Issue("fatal", "too-long", "json-number-too-long", message))


_DECODER: Final = json.JSONDecoder(
    object_pairs_hook=_object, parse_float=_fraction, parse_int=_whole, parse_constant=_constant
)


def _at(issue: Issue, source: str) -> Issue:
    return Issue(issue.severity, issue.code, issue.rule, issue.text, issue.expression, issue.field, source,
                 issue.line, issue.column)  # fmt: skip
