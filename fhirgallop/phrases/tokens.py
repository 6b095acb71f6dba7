"""Cuts a line into words, numbers and signs, each with its place. Linear; no sign is lost."""

from __future__ import annotations

import re
from typing import Final, NamedTuple


class Token(NamedTuple):
    """One word, number or sign; `word` is folded for looking up."""

    word: str
    start: int
    end: int


# A number with its decimals; an elided word (d'); a word, which may hold digits and an apostrophe (S3, Erb's,
# e'); an arrow of bounded length, so that a row of hyphens costs no more than its length; any one other sign.
_TOKEN: Final = re.compile(
    r"\d+(?:[.,]\d+)?|[A-Za-z]'(?=[^\W\d_])|[^\W\d_][^\W_]*(?:'[^\W_]*)?|-{1,3}>|\([-+]\)|[^\w\s]|_|\n"
)


def tokens(text: str) -> list[Token]:
    """The tokens of `text`; typographic apostrophes and dashes count as plain ones."""
    plain = text.translate(_PLAIN) if not text.isascii() else text
    return [Token(m[0].casefold(), m.start(), m.end()) for m in _TOKEN.finditer(plain)]


def words(wording: str) -> tuple[str, ...]:
    """The folded tokens of a wording of the vocabulary, without the hyphens inside words."""
    cut = tokens(wording)
    return tuple(token.word for place, token in enumerate(cut) if not is_hyphen(cut, place))


def is_hyphen(cut: list[Token], place: int) -> bool:
    """True for a hyphen that joins two words (mid-systolic), which counts as a blank."""
    if cut[place].word != "-" or not 0 < place < len(cut) - 1:
        return False
    before, after = cut[place - 1], cut[place + 1]
    return before.end == cut[place].start and cut[place].end == after.start and _joined(before, after)


def _joined(before: Token, after: Token) -> bool:
    return before.word[-1].isalnum() and after.word[0].isalnum()


# One character for one character, so that places stay true.
_PLAIN: Final = {ord("’"): "'", ord("‘"): "'", ord("′"): "'", ord("–"): "-", ord("—"): ";", ord("−"): "-"}
