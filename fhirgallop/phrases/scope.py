"""Whose words are denied, doubted, not of today, or not of this patient.

After NegEx (Chapman et al. 2001: a denying phrase before or after a finding, phrases that end its reach,
phrases that only look like denials) and ConText (Harkema et al. 2009: the same for doubt, past, other
persons and conditions). Where it is doubtful how far a phrase reaches, the finding is uncertain, never
present or absent.
"""

from __future__ import annotations

import itertools
from typing import Final

from fhirgallop.exam.checks import ALSO_OF_ABSENT
from fhirgallop.phrases.clauses import Phrase, accepts

OUTSIDE: Final = {"past": "past", "family": "family", "if": "condition", "patient": "patient"}
_RANK: Final = ("if", "family", "patient", "past", "not-examinable", "not-examined", "maybe", "no")
_LIST_LINKS: Final = frozenset({"or", "and", "slash", "comma"})


def settle(clause: list[Phrase]) -> None:
    """Gives every phrase of a clause its `said`: present, no, maybe, not-examined ... or `out`."""
    named = [phrase for phrase in clause if phrase.head is not None]
    for phrase in named:
        _own(phrase)
    _forward(clause, named)
    _backward(named)
    for before, phrase in itertools.pairwise(named):
        if phrase.link == "except" or _either_way(before, phrase):
            for one in (before, phrase):
                one.said, one.rule = "maybe", "scope-doubtful"
        elif phrase.link in ("or", "vs") and phrase.said == before.said == "":
            for one in (before, phrase):
                one.said, one.rule = "maybe", "doubted"
        elif (
            phrase.link in ("or", "vs") and phrase.said in ("", "yes") and before.said in ("maybe", "", "yes")
        ):
            phrase.said, phrase.rule = "maybe", "doubted"
            if before.said != "maybe" and not strong(before):
                before.said, before.rule = "maybe", "doubted"


def _either_way(before: Phrase, phrase: Phrase) -> bool:
    """`S3 no S4 yes`: a cue between two names, and another one after the second, may belong to either."""
    anchor, first = phrase.anchor, before.anchor
    if phrase.link != "next" or anchor is None or first is None:
        return False
    if before.said == "no" and phrase.rule in ("", "scope-doubtful", "denied-list"):
        return all(item.first > first.first for _, means, item in before.cues() if means == "no")
    if before.said:
        return False
    places = [
        item.first < anchor.first for _, means, item in phrase.cues() if means in ("no", "maybe", "yes")
    ]
    return True in places and False in places


def strong(phrase: Phrase) -> bool:
    """Whether a phrase describes what only something present has: a grade, a number, an answer, a quality."""
    head = phrase.head
    if head is None:
        return True
    if head.answers or head.presence:
        return True
    counted = any(one.kind in ("quantity", "panel") for one in head.findings)
    for item in (*phrase.items, *phrase.extra):
        if item.grade is not None or (counted and (item.number is not None or item.fraction is not None)):
            return True
        if item.sense.plain.keys() & {"way", "where"}:
            return True
        if item is not phrase.anchor and any(
            accepts(head, pair) and pair[0] not in ALSO_OF_ABSENT for pair in item.sense.values
        ):
            return True
    return False


def _own(phrase: Phrase) -> None:
    """What the cues beside the name itself say."""
    cues = _of_today([(item.first, use, means) for use, means, item in phrase.cues()])
    if not cues:
        return
    means = [one for _, _, one in cues]
    against = any(use == "beside" for _, use, one in cues if one == "no") and "yes" in means
    if means.count("no") > 1 or against:
        phrase.said, phrase.rule = "maybe", "scope-doubtful"
        return
    said = next((one for one in _RANK if one in means), "yes" if "yes" in means else "")
    phrase.said = said
    phrase.rule = {"no": "denied", "maybe": "doubted"}.get(said, "said" if said == "yes" else said)


def _of_today(cues: list[tuple[int, str, str]]) -> list[tuple[int, str, str]]:
    """Of `previously absent, now present` only what is said of now."""
    means = {one: place for place, _, one in cues}
    if "no-today" in means:
        return [(means["no-today"], "before", "no")]
    if "today" not in means:
        return cues
    now, past = means["today"], means.get("past", -1)
    kept = [cue for cue in cues if cue[2] not in ("today", "past")]
    if past > now:
        kept = [cue for cue in kept if cue[0] < past]
    elif past >= 0:
        after = [cue for cue in kept if cue[0] > now]
        kept = after or [cue for cue in kept if cue[0] > past]
    return kept or [(now, "after", "yes")]


def _opens(phrase: Phrase) -> bool:
    """Whether its deciding cue stands before the name, so that it may reach on."""
    anchor = phrase.anchor
    return anchor is not None and any(
        means == phrase.said and item.first < anchor.first for _, means, item in phrase.cues()
    )


def _forward(clause: list[Phrase], named: list[Phrase]) -> None:
    lengths, listed = _chains(named)
    reach, in_list = "", False
    for place, phrase in enumerate(named):
        if phrase.said and phrase.said != "yes":
            reach = phrase.said if _opens(phrase) or phrase.said in ("if", "family") else ""
            in_list = False
        elif reach == "if":
            phrase.said = phrase.rule = reach
        elif reach:
            verdict = _reached(phrase)
            if verdict == "ask":
                in_list = in_list or listed[place] or lengths[place] > 1
                verdict = "in" if in_list else "doubt"
            if verdict == "in":
                phrase.said = reach
                phrase.rule = {"no": "denied-list", "maybe": "doubted"}.get(reach, reach)
            else:
                reach = ""
                if verdict == "doubt":
                    phrase.said, phrase.rule = "maybe", "scope-doubtful"
    if any(means == "if" for phrase in clause for _, means, _ in phrase.cues() if phrase.head is None):
        for phrase in named:
            phrase.said = phrase.rule = "if"
    _led_by_another(clause)


def _led_by_another(clause: list[Phrase]) -> None:
    """A segment without a name that speaks of kin or of a condition covers what follows it."""
    for before, phrase in itertools.pairwise(clause):
        if before.head is None and any(means == "family" for _, means, _ in before.cues()):
            phrase.said = phrase.rule = "family"


def _reached(phrase: Phrase) -> str:
    """Whether a cue further left reaches a phrase by its link: in, out, doubt, or ask (a list by commas)."""
    link, describes, stated = phrase.link, strong(phrase), phrase.said == "yes"
    if link in ("or", "slash"):
        return "doubt" if describes else "in"
    if link == "comma":
        return "out" if stated or describes else "ask"
    if describes:
        return "out"
    return "doubt" if stated or link in ("with", "next", "vs") else "in"


def _chains(named: list[Phrase]) -> tuple[list[int], list[bool]]:
    """For each phrase: how many bare ones follow in one list from it on, and whether or/and closes it."""
    lengths, listed = [0] * len(named), [False] * len(named)
    for place in range(len(named) - 1, -1, -1):
        phrase = named[place]
        if phrase.said or strong(phrase):
            continue
        follows = place + 1 < len(named) and named[place + 1].link in _LIST_LINKS
        lengths[place] = 1 + (lengths[place + 1] if follows else 0)
        listed[place] = phrase.link in ("or", "and") or (follows and listed[place + 1])
    return lengths, listed


def _backward(named: list[Phrase]) -> None:
    """A cue after the last name of a list reaches back over it."""
    said = ""
    for place in range(len(named) - 1, -1, -1):
        phrase = named[place]
        if phrase.said and phrase.said != "yes":
            said = "" if _opens(phrase) or phrase.rule == "denied-list" else phrase.said
        elif said and not phrase.said:
            link = named[place + 1].link
            if strong(phrase) or (link == "comma" and _described(phrase)):
                said = ""
            elif link in ("or", "and", "slash", "next"):
                phrase.said = said
                phrase.rule = {"no": "denied-list", "maybe": "doubted"}.get(said, said)
            elif link == "comma" and said in ("no", "maybe"):
                phrase.said, phrase.rule = "maybe", "scope-doubtful"
                said = "maybe"
            else:
                said = ""
        else:
            said = ""


def _described(phrase: Phrase) -> bool:
    return any(
        item is not phrase.anchor and (item.sense.values or "kind" in item.sense.plain)
        for item in phrase.items
    )
