"""What is said once of several names: `S1 and S2 normal`."""

from __future__ import annotations

import itertools
from typing import Final

from fhirgallop.phrases.clauses import Phrase
from fhirgallop.phrases.items import Item

_TIES: Final = frozenset({"and", "slash", "next"})


def share(clause: list[Phrase]) -> None:
    """Gives an answer after the last, or `normal` before the first, of tied names to each of them."""
    for place in range(len(clause) - 1, 0, -1):
        before, phrase = clause[place - 1], clause[place]
        if not _bare(before) or phrase.anchor is None:
            continue
        for item in _answers(phrase):
            tied = phrase.link in _TIES or (phrase.link == "comma" and _is_normal(item))
            if tied and item.first > phrase.anchor.first and _answers_of(before, item):
                before.extra.append(item)
    for before, phrase in itertools.pairwise(clause):
        if not _bare(phrase) or before.anchor is None or phrase.link not in _TIES:
            continue
        for item in _answers(before):
            if _is_normal(item) and item.first < before.anchor.first and _answers_of(phrase, item):
                phrase.extra.append(item)


def _bare(phrase: Phrase) -> bool:
    return (
        phrase.head is not None
        and not phrase.head.answers
        and not any(phrase.cues())
        and all(item is phrase.anchor or not (item.sense.values or item.number) for item in phrase.items)
        and not phrase.extra
    )


def _answers(phrase: Phrase) -> list[Item]:
    return [
        item
        for item in (*phrase.items, *phrase.extra)
        if item is not phrase.anchor and _answers_of(phrase, item)
    ]


def _answers_of(phrase: Phrase, item: Item) -> bool:
    head = phrase.head
    return head is not None and any(
        one.answers == axis for one in head.findings for axis, _ in item.sense.values
    )


def _is_normal(item: Item) -> bool:
    return any(value == "normal" for _, value in item.sense.values)
