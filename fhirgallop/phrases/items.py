"""Tokens to items: the longest wording at each place, grades, fractions and numbers."""

from __future__ import annotations

import itertools
from decimal import Decimal
from typing import Final

from fhirgallop.codes import units
from fhirgallop.codes.units import Unit
from fhirgallop.exam.entry import Grade
from fhirgallop.phrases.tokens import Token, is_hyphen
from fhirgallop.phrases.vocabulary import Entries, Head, Sense, Vocabulary

_ROMAN: Final = {"i": 1, "ii": 2, "iii": 3, "iv": 4, "v": 5, "vi": 6}
_SCALES: Final = {"6": 6, "vi": 6, "4": 4, "iv": 4}
_COMPARATORS: Final = frozenset("<>≤≥")
_UNKNOWN: Final = Sense()
# `- S4`: an item of a list, or a minus? Where several lines begin so, an item; else it is in doubt.
_BULLET: Final = Sense(plain={"idle": "idle"})
_LEADING_DASH: Final = Sense(cues=(("before", "maybe"),))
# `S3?`: a question mark that touches a word doubts that word.
_AFTER: Final = Sense(cues=(("after", "maybe"),))
_LONGEST_NUMBER: Final = 9
_LONGEST_UNIT: Final = 4


class Item:
    """One wording or number at its place; `first` and `last` are places of tokens."""

    __slots__ = (
        "first", "fraction", "grade", "head", "high", "last", "number", "sense", "sign", "unit", "unit_last",
        "unknown", "used",
    )  # fmt: skip

    def __init__(self, first: int, last: int, sense: Sense = _UNKNOWN, *, unknown: bool = False) -> None:
        self.first = first
        self.last = last
        self.sense = sense
        self.grade: Grade | None = None
        self.fraction: tuple[Decimal, Decimal] | None = None
        self.number: Decimal | None = None
        self.high: Decimal | None = None
        self.sign = ""
        self.unknown = unknown
        self.unit: Unit | None = None
        self.unit_last = last
        self.head: Head | None = None
        self.used = False

    def plain(self, use: str) -> str:
        """What the wording means in a use such as link or way; empty for none."""
        return self.sense.plain.get(use, "")


def items(text: str, cut: list[Token], vocabulary: Vocabulary) -> list[Item]:
    """All items of a line, in order; every token but a hyphen inside a word is in one of them."""
    found: list[Item] = []
    kept = [token for place, token in enumerate(cut) if token.word != "-" or not is_hyphen(cut, place)]
    glued = _glued(cut) if len(kept) != len(cut) else frozenset()
    place, count, entries = 0, len(kept), vocabulary.entries
    cut[:] = kept
    while place < count:
        word = kept[place].word
        best, sense = _longest(entries, kept, place)
        if best < 1 and (best == 0 or word[0].isdigit() or word in _ROMAN or word in _COMPARATORS):
            number = _number(kept, place, vocabulary, sense, glued)
            if number is not None:
                if number.grade is None:
                    _unit(text, kept, number, vocabulary)
                found.append(number)
                place = number.unit_last + 1
                continue
        if best >= 0:
            if word == "?" and place and kept[place - 1].end == kept[place].start:
                sense = _AFTER
            elif word == "-" and _leads_line(kept, place):
                sense = _BULLET if "\n- " in text else _LEADING_DASH
            found.append(Item(place, place + best, sense))
            place += best + 1
        else:
            found.append(Item(place, place, unknown=word[0].isalpha()))
            place += 1
    _strangers(found, kept, glued)
    return found


def _leads_line(kept: list[Token], place: int) -> bool:
    """A dash that begins a line and stands apart from its first word."""
    first = place == 0 or kept[place - 1].word == "\n"
    return first and place + 1 < len(kept) and kept[place + 1].start > kept[place].end


def _longest(entries: Entries, kept: list[Token], place: int) -> tuple[int, Sense]:
    """The longest wording that begins at a place: how many words it has after the first; -1 for none."""
    by_second = entries.get(kept[place].word)
    if by_second is None:
        return -1, _UNKNOWN
    left = len(kept) - place - 1
    if left:
        for rest, sense in by_second.get(kept[place + 1].word, ()):
            size = len(rest)
            if size == 0 or (
                size < left and all(kept[place + 2 + n].word == one for n, one in enumerate(rest))
            ):
                return size + 1, sense
    alone = by_second.get("")
    return (0, alone[0][1]) if alone else (-1, _UNKNOWN)


def _glued(cut: list[Token]) -> frozenset[int]:
    """Starts of tokens that a hyphen ties to the token before."""
    return frozenset(cut[place + 1].start for place in range(1, len(cut) - 1) if is_hyphen(cut, place))


def _strangers(found: list[Item], kept: list[Token], glued: frozenset[int]) -> None:
    """A word tied to an unknown one (L4-S1) is not what it seems."""
    if not glued:
        return
    for before, after in itertools.pairwise(found):
        if kept[after.first].start in glued and before.unknown != after.unknown:
            for item in (before, after):
                item.sense, item.unknown = _UNKNOWN, True


def _number(
    kept: list[Token], place: int, vocabulary: Vocabulary, sense: Sense, glued: frozenset[int]
) -> Item | None:
    start = place
    named = "grade" in sense.plain
    if named:
        place += 1
    elif sense is not _UNKNOWN:
        return None
    word = _at(kept, place)
    sign = word if word in _COMPARATORS else ""
    if sign:
        place += 1
        word = _at(kept, place)
    low = _value(word, vocabulary)
    if low is None:
        return None
    high, last = low, place
    if place + 1 < len(kept) and kept[place + 1].start in glued and _value(_at(kept, place + 1), vocabulary):
        high, last = _value(_at(kept, place + 1), vocabulary) or low, place + 1
    roman = word in _ROMAN
    over = _at(kept, last + 2) if _at(kept, last + 1) == "/" else ""
    item = Item(start, last)
    if over:
        return _over(item, low, high, over, vocabulary, named or roman)
    if named:
        item.grade = _grade(low, high, 6)
        return item
    if roman:
        return None if word in ("i", "v") else _plain(item, low, high, sign)
    return _plain(item, low, high, sign)


def _unit(text: str, kept: list[Token], item: Item, vocabulary: Vocabulary) -> None:
    """The unit after a number, by its longest spelling; words such as `in` are words."""
    item.unit_last = item.last
    start = item.last + 1
    if start >= len(kept) or not (kept[start].word[0].isalpha() or kept[start].word in "%/°"):
        return
    table = units.table()
    for size in range(min(_LONGEST_UNIT, len(kept) - start), 0, -1):
        last = start + size - 1
        unit = table.find(text[kept[start].start : kept[last].end])
        if unit and not (size == 1 and _is_word(kept[start].word, vocabulary)):
            item.unit, item.unit_last = unit, last
            return


def _is_word(word: str, vocabulary: Vocabulary) -> bool:
    alone = vocabulary.entries.get(word, {}).get("")
    return alone is not None and bool(alone[0][1].plain)


def _over(
    item: Item, low: Decimal, high: Decimal, over: str, vocabulary: Vocabulary, named: bool
) -> Item | None:
    """3/6, III/VI, 138/82: a grade where it can be one, else two numbers."""
    below = _value(over, vocabulary)
    if below is None:
        if named:
            return None
        return _plain(item, low, high, "")
    item.last = item.unit_last = item.last + 2
    scale = _SCALES.get(over)
    item.grade = _grade(low, high, scale) if scale else None
    if item.grade is None:
        item.fraction = (low, below)
    return item


def _plain(item: Item, low: Decimal, high: Decimal, sign: str) -> Item:
    item.number, item.sign = low, {"≤": "<=", "≥": ">="}.get(sign, sign)
    item.high = high if high != low else None
    return item


def _grade(low: Decimal, high: Decimal, of: int) -> Grade | None:
    if low != int(low) or high != int(high) or not 1 <= low <= high <= of:
        return None
    return Grade(int(low), int(high), of)


def _at(kept: list[Token], place: int) -> str:
    return kept[place].word if place < len(kept) else ""


def _value(word: str, vocabulary: Vocabulary) -> Decimal | None:
    if not word:
        return None
    if word in _ROMAN:
        return Decimal(_ROMAN[word])
    if not word[0].isdecimal() or len(word) > _LONGEST_NUMBER or not word.isascii():
        return None
    if "," in word and vocabulary.decimal != ",":
        return None
    return Decimal(word.replace(",", "."))
