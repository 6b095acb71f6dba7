"""Items to phrases: a phrase is one finding's name with what stands beside it.

A line falls into clauses (full stop, semicolon, `but`), a clause into segments (comma), a segment into
phrases: where two names stand in one segment, it is cut at the link between them, or, without one, where the
words of the first end and those of the second begin.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable
from typing import Final

from fhirgallop.phrases.items import Item
from fhirgallop.phrases.tokens import Token
from fhirgallop.phrases.vocabulary import Head, Pair

_STOPS: Final = frozenset(".;\n")
_SPEAKING: Final = frozenset({"grade", "way", "kind", "where", "since"})
_COMMAS: Final = frozenset(",()")


class Phrase:
    """A name (`head`, None where a segment has none) and its items; `link` ties it to the phrase before."""

    __slots__ = ("anchor", "extra", "head", "items", "link", "out", "rule", "said")

    def __init__(self, link: str, items: list[Item], anchor: Item | None) -> None:
        self.link = link
        self.items = items
        self.anchor = anchor
        self.head: Head | None = anchor.head if anchor else None
        self.extra: list[Item] = []
        self.said = ""
        self.rule = ""
        self.out = ""

    def cues(self) -> Iterable[tuple[str, str, Item]]:
        """Use, meaning and item of every cue in it."""
        for item in (*self.items, *self.extra):
            for use, means in item.sense.cues:
                yield use, means, item


def clauses(found: list[Item], cut: list[Token]) -> list[list[Phrase]]:
    """The phrases of every clause, in order."""
    split: list[list[Phrase]] = []
    clause: list[list[Item]] = [[]]
    for item in found:
        sign = cut[item.first].word
        if sign == "." and _is_ordinal(clause[-1]):
            continue
        if (sign in _STOPS and item.first == item.last) or item.plain("stop"):
            split.append(_phrases(clause))
            clause = [[]]
        elif item.first == item.last and (sign in _COMMAS or (sign == ":" and _is_title(clause[-1]))):
            clause.append([])
        else:
            clause[-1].append(item)
    split.append(_phrases(clause))
    _carry_over(split)
    return [clause for clause in split if clause]


def _is_ordinal(segment: list[Item]) -> bool:
    """`weder 3. noch 4. Herzton`: a full stop after a number whose denial has not met a name yet."""
    return (
        bool(segment)
        and segment[-1].number is not None
        and any(use == "before" for item in segment for use, _ in item.sense.cues)
        and not any(item.sense.heads for item in segment)
    )


def _is_title(segment: list[Item]) -> bool:
    """`Extremities:` heads what follows, and is no part of it."""
    return not any(
        item.sense.heads or item.sense.cues or item.sense.plain.keys() & _SPEAKING for item in segment
    )


def accepts(head: Head, pair: Pair) -> bool:
    """Whether a value can be said of one of the findings that a name may mean."""
    return any(one.answers == pair[0] or pair[0] in one.qualifiers for one in head.findings)


def _phrases(segments: list[list[Item]]) -> list[Phrase]:
    found: list[Phrase] = []
    for segment in segments:
        if not segment:
            continue
        heads = _heads(segment, found)
        if not heads:
            _headless(segment, found)
            continue
        for number, phrase in enumerate(_cut(segment, heads)):
            if number == 0 and found:
                phrase.link = segment[0].plain("link") or "comma"
            found += _each(phrase)
    return _joined(found)


def _headless(segment: list[Item], found: list[Phrase]) -> None:
    """A segment without a name goes to the name before it when it is all description, or all presence."""
    target = found[-1] if found else None
    if target is not None and target.head is not None and _attaches(segment, target.head):
        target.extra += segment
    else:
        found.append(Phrase("comma" if found else "", segment, None))


def _attaches(segment: list[Item], head: Head) -> bool:
    telling = [item for item in segment if not item.sense.silent]
    if not telling or any(item.unknown for item in telling):
        return False
    if all(item.sense.cues for item in telling):
        return True
    return all(_describes(item, head) for item in telling)


def _describes(item: Item, head: Head) -> bool:
    if item.grade is not None:
        return any("grade" in one.qualifiers for one in head.findings)
    if where := item.plain("where"):
        return any(where in one.qualifiers for one in head.findings)
    if item.sense.plain.keys() & {"way", "manoeuvre"}:
        return any("timing" in one.qualifiers or "movement.stand" in one.qualifiers for one in head.findings)
    return any(accepts(head, pair) for pair in item.sense.values) or (
        "kind" in item.sense.plain and not item.sense.cues
    )


def _joined(found: list[Phrase]) -> list[Phrase]:
    """A description at the start of a clause goes to the name that follows it."""
    if len(found) > 1 and found[0].head is None and found[1].head is not None:
        first, second = found[0], found[1]
        if second.head and all(i.sense.silent or _describes(i, second.head) for i in first.items):
            second.items = [*first.items, *second.items]
            second.link = ""
            return found[1:]
    return found


def _carry_over(split: list[list[Phrase]]) -> None:
    """`2/6 murmur. Radiates to the axilla.`: such a sentence describes the murmur before it."""
    last: Phrase | None = None
    for clause in split:
        if len(clause) == 1 and clause[0].head is None and last is not None and last.head is not None:
            telling = [item for item in clause[0].items if not item.sense.silent]
            leads = bool(telling) and bool(telling[0].sense.plain.keys() & {"way", "where"})
            if leads and all(not i.sense.cues and _describes(i, last.head) for i in telling):
                last.extra += clause[0].items
                clause.clear()
                continue
        last = clause[-1] if clause else last


def _heads(segment: list[Item], before: list[Phrase]) -> list[int]:
    """Places of the names in a segment; what may also be a value is a name only where no name takes it."""
    pure = [place for place, item in enumerate(segment) if item.sense.heads and not item.sense.values]
    named = [segment[place].sense.heads[0] for place in pure]
    places = list(pure)
    for place, item in enumerate(segment):
        if item.sense.heads and item.sense.values and not _is_value(item, segment, named, before):
            places.append(place)
    places.sort()
    for place in places:
        segment[place].head = segment[place].sense.heads[0]
    return places


def _is_value(item: Item, segment: list[Item], named: list[Head], before: list[Phrase]) -> bool:
    if any(accepts(head, pair) for head in named for pair in item.sense.values):
        return True
    own = item.sense.heads[0]
    if own.answers:
        return False
    said = any(
        other is not item
        and (
            other.sense.cues
            or other.number is not None
            or any(one.answers == axis for axis, _ in other.sense.values for one in own.findings)
        )
        for other in segment
    )
    if said:
        return False
    last = before[-1].head if before else None
    return last is not None and any(accepts(last, pair) for pair in item.sense.values)


def _cut(segment: list[Item], heads: list[int]) -> list[Phrase]:
    found: list[Phrase] = []
    start, link = 0, ""
    for here, following in itertools.pairwise(heads):
        end, begin, next_link = _border(segment, start, here, following)
        found.append(Phrase(link, segment[start:end], segment[here]))
        start, link = begin, next_link
    found.append(Phrase(link, segment[start:], segment[heads[-1]]))
    return found


def _border(segment: list[Item], start: int, here: int, following: int) -> tuple[int, int, str]:
    """Where the first phrase ends, where the second begins, and what links them."""
    for place in range(following - 1, here, -1):
        if link := segment[place].plain("link"):
            return place, place + 1, link
    for place in range(here + 1, following):
        if segment[place].sense.cues and all(use == "before" for use, _ in segment[place].sense.cues):
            return place, place, "next"
    led_by_name = all(item.sense.silent for item in segment[start:here])
    border = following
    while border - 1 > here and _leads(
        segment[border - 1], segment, here, following, led_by_name=led_by_name
    ):
        border -= 1
    return border, border, "next"


def _leads(item: Item, segment: list[Item], here: int, following: int, *, led_by_name: bool) -> bool:
    """Whether an item before a name belongs to that name rather than to the one before."""
    if item.sense.cues:
        return any(use == "before" for use, _ in item.sense.cues)
    first, second = segment[here].head, segment[following].head
    if first is None or second is None or item.number is not None or item.fraction is not None:
        return False
    if item.grade is not None:
        return any("grade" in one.qualifiers for one in second.findings)
    to_second = any(accepts(second, pair) for pair in item.sense.values) or "kind" in item.sense.plain
    to_first = any(accepts(first, pair) for pair in item.sense.values)
    return to_second and (not to_first or not led_by_name)


def _each(phrase: Phrase) -> list[Phrase]:
    """A wording that names several findings (m/r/g) is a phrase for each."""
    anchor = phrase.anchor
    if anchor is None or len(anchor.sense.heads) < 2:
        return [phrase]
    found = []
    for number, head in enumerate(anchor.sense.heads):
        one = Phrase(phrase.link if number == 0 else "slash", phrase.items, anchor)
        one.head = head
        found.append(one)
    return found
