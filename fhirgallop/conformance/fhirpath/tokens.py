"""Splits a FHIRPath expression into tokens.

Source: FHIRPath N1 (v2.0.0), section 4 "Lexical elements" and the grammar of its appendix B.
Beyond the grammar, a text in double quotes is read as a string and an unknown escape keeps its backslash,
because published and site rules are written that way.
"""

from __future__ import annotations

import re
from typing import Literal, NamedTuple

MAX_LENGTH = 50_000

Kind = Literal["name", "string", "number", "moment", "time", "variable", "special", "symbol", "end"]

_TOKEN = re.compile(
    r"""
    (?P<space>[ \t\r\n]+|//[^\n]*)
  | (?P<comment>/\*)
  | (?P<time>@T[0-9]{2}(?::[0-9]{2}(?::[0-9]{2}(?:\.[0-9]+)?)?)?)
  | (?P<moment>@[0-9]{4}(?:-[0-9]{2}){0,2}
      (?:T(?:[0-9]{2}(?::[0-9]{2}(?::[0-9]{2}(?:\.[0-9]+)?)?)?(?:Z|[+-][0-9]{2}:[0-9]{2})?)?)?)
  | (?P<number>[0-9]+(?:\.[0-9]+)?)
  | (?P<name>[A-Za-z_][A-Za-z0-9_]*)
  | (?P<variable>%(?:[A-Za-z_][A-Za-z0-9_-]*|(?=[`'])))
  | (?P<special>\$[A-Za-z]+)
  | (?P<quote>['"`])
  | (?P<symbol><=|>=|!=|!~|[-+*/&|=~<>.,()\[\]{}])
    """,
    re.VERBOSE | re.ASCII,
)
_ESCAPES = {"r": "\r", "n": "\n", "t": "\t", "f": "\f", "\\": "\\", "/": "/", "'": "'", '"': '"', "`": "`"}


class ExpressionError(Exception):
    """An expression is not FHIRPath; the message says where and why."""


class Token(NamedTuple):
    """One token: what it is, its text without quotes and escapes, and its offset."""

    kind: Kind
    text: str
    at: int


def tokenize(text: str) -> list[Token]:
    """All tokens of an expression, the last of kind "end".

    Raises:
        ExpressionError: a character has no place in FHIRPath, or a string or comment has no end.
    """
    if len(text) > MAX_LENGTH:
        raise ExpressionError(f"the expression is longer than {MAX_LENGTH} characters")
    tokens: list[Token] = []
    at = 0
    while at < len(text):
        match = _TOKEN.match(text, at)
        if match is None:
            raise ExpressionError(f"character {at + 1} has no place in FHIRPath")
        kind = match.lastgroup
        start, at = at, match.end()
        if kind == "comment":
            at = text.find("*/", at) + 2
            if at < 2:
                raise ExpressionError("a comment has no end")
        elif kind == "quote":
            body, at = _quoted(text, at, match.group())
            tokens.append(Token("name" if match.group() == "`" else "string", body, start))
        elif kind == "variable" and match.group() == "%":
            body, at = _quoted(text, at + 1, text[at])
            tokens.append(Token("variable", body, start))
        elif kind == "variable":
            tokens.append(Token("variable", match.group()[1:], start))
        elif kind != "space":
            tokens.append(Token(kind, match.group(), start))  # type: ignore[arg-type]  # the groups are the kinds
    tokens.append(Token("end", "", len(text)))
    return tokens


def _quoted(text: str, at: int, quote: str) -> tuple[str, int]:
    """The text up to the closing quote, escapes resolved, and the offset behind it."""
    parts: list[str] = []
    while at < len(text):
        sign = text[at]
        if sign == quote:
            return "".join(parts), at + 1
        if sign == "\\" and at + 1 < len(text):
            follower = text[at + 1]
            if follower == "u" and re.fullmatch(r"[0-9A-Fa-f]{4}", text[at + 2 : at + 6]):
                parts.append(chr(int(text[at + 2 : at + 6], 16)))
                at += 6
                continue
            parts.append(_ESCAPES.get(follower, "\\" + follower))
            at += 2
            continue
        parts.append(sign)
        at += 1
    raise ExpressionError("a string has no closing quote")
