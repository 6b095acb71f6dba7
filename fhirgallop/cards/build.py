"""Cards in the form of CDS Hooks: what the alert policy decided, as the JSON a client shows.

Source: CDS Hooks 2.0.1, "CDS Service Response". Everything that came from a record is escaped for Markdown;
no finding is ever edited: a suggestion creates a Task and nothing else.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from typing import Any, Final

from fhirgallop.cards import words
from fhirgallop.cards.card import Card, combination_digest, entry_digest, may_be_true
from fhirgallop.cards.frame import Frame
from fhirgallop.cards.memory import Answer
from fhirgallop.cards.opinion import limits
from fhirgallop.cards.policy import Ask, Decision
from fhirgallop.cards.safety import SAFETY_TEXTS
from fhirgallop.cards.tasks import RHYTHM, asks_for_rhythm, rhythm_suggestion, suggestions, system_action
from fhirgallop.cards.today import Held
from fhirgallop.codes import systems
from fhirgallop.reasoning.conclusion import Conclusion, cutoffs_of
from fhirgallop.reasoning.items import Item
from fhirgallop.reasoning.vocabulary import URGENT_PHRASE

MAX_SUMMARY: Final = 139
"""CDS Hooks: fewer than 140 characters."""
MAX_SUGGESTIONS: Final = 4
ANSWER_SYSTEM: Final = f"{systems.BASE}/CodeSystem/card-answer"
TOPIC_SYSTEM: Final = f"{systems.BASE}/CodeSystem/card-topic"
SOURCE_LABEL: Final = "fhirgallop heart examination review"
_ANSWERS: Final = {
    Answer.LOOKED_AGAIN: "Looked or listened again; the entries stand",
    Answer.WILL_CORRECT: "An entry will be corrected by its author",
    Answer.BOTH_TRUE: "Both entries are true",
    Answer.TRUE_IN_PATIENT: "True in this patient, for twelve months",
}
_SENTENCE: Final = re.compile(r"[^.?]{1,400}[.?](?=\s|$)")
# What Markdown of GitHub's flavour gives a meaning inside a line; an address is broken before its slashes.
_MARKED: Final = re.compile(r"([\\`*_\[\]<>&|~#!@]|:(?=//)|(?<=[Ww]{3})\.)")


@dataclass(frozen=True, slots=True)
class Shown:
    """A card that was given out, as it is remembered: rule ids and digests, no findings.

    Attributes:
        entries: digests to be silenced for the encounter by an answer.
        combinations: digests that "true in this patient" may silence.
        shared: an answer holds for every user of the encounter; an urgent card each user answers alone.
    """

    uuid: str
    rules: tuple[str, ...]
    entries: tuple[str, ...]
    combinations: tuple[str, ...]
    shared: bool


def answer(decision: Decision, held: Held, frame: Frame) -> tuple[dict[str, Any], list[Shown]]:
    """An answer with its cards, loudest first, and what is to be remembered of them.

    The same facts and the same hookInstance give the same cards in the same order.
    """
    given, shown = _cards(decision, held, frame)
    found: dict[str, Any] = {"cards": given}
    asks = decision.ask is not None and decision.ask.id.startswith(RHYTHM)
    calm = (card for card in decision.cards if card.level != "urgent")
    if frame.acts and given and (asks or any(asks_for_rhythm(c) for card in calm for c in card.conclusions)):
        found["systemActions"] = [system_action(frame)]
    return found, shown


def _cards(decision: Decision, held: Held, frame: Frame) -> tuple[list[dict[str, Any]], list[Shown]]:
    given = [_card(card, held, frame) for card in decision.cards]
    shown = [_shown(card, frame) for card in decision.cards]
    folded = [f"Further, folded: {card.title}" for card in decision.folded]
    asked = decision.ask
    if given and (folded or asked):
        last = given[-1]
        lines = [*folded, *([asked.text] if asked else [])]
        last["detail"] = _inserted(last["detail"], [escaped(line) for line in lines])
    elif asked and asked.id.startswith(RHYTHM):
        # what is unknown never alerts; the rhythm alone, which most rules need, is asked for in a card
        given.append(_asking(asked, held, frame))
        shown.append(Shown(frame.id("ask", asked.id), (), (), (), shared=False))
    return given, shown


def escaped(text: str) -> str:
    """Text on one line that Markdown shows as it stands."""
    line = text if text.isprintable() else "".join(one if one.isprintable() else " " for one in text)
    return _MARKED.sub(r"\\\1", " ".join(line.split()))


def _shown(card: Card, frame: Frame) -> Shown:
    true = (combination_digest(c) for c in card.conclusions if may_be_true(c))
    return Shown(
        frame.id(card.key),
        tuple(dict.fromkeys(c.rule.id for c in card.conclusions)),
        tuple(dict.fromkeys(entry_digest(c) for c in card.conclusions)),
        tuple(dict.fromkeys(true)),
        card.level != "urgent",
    )


def _card(card: Card, held: Held, frame: Frame) -> dict[str, Any]:
    urgent = card.level == "urgent"
    first, rule = card.sections[0], card.sections[0].conclusions[0].rule
    topic = "urgent" if urgent else rule.family or rule.id
    headline = URGENT_PHRASE if urgent else summary(first.title, first.question, first.conclusions[0].text)
    found: dict[str, Any] = {
        "uuid": frame.id(card.key),
        "summary": headline,
        "indicator": _indicator(card, frame),
        "detail": "\n".join(_urgent_detail(card, held) if urgent else _detail(card, held)),
        "source": _source(frame, topic, card.title),
        "overrideReasons": [
            {"code": answer.value, "system": ANSWER_SYSTEM, "display": _ANSWERS[answer]}
            for answer in card.answers
        ],
    }
    offered = [] if urgent else list(suggestions(card, held, frame))
    if offered:
        found["suggestions"] = offered[:MAX_SUGGESTIONS]
        found["selectionBehavior"] = "any"
    if frame.pages and not urgent:
        # an urgent card names entries only: its rules would name a diagnosis
        rules = dict.fromkeys(c.rule.id for c in card.conclusions)
        found["links"] = [
            {
                "label": f"The rule {rule} and its sources",
                "url": f"{frame.pages}/rules/{rule}",
                "type": "absolute",
            }
            for rule in rules
        ]
    return found


def _indicator(card: Card, frame: Frame) -> str:
    if card.level == "urgent" and frame.critical:
        return "critical"
    return "info" if card.level == "advisory" else "warning"


def _source(frame: Frame, topic: str, display: str) -> dict[str, Any]:
    source: dict[str, Any] = {
        "label": SOURCE_LABEL,
        "topic": {"system": TOPIC_SYSTEM, "code": topic, "display": display},
    }
    if frame.pages:
        source["url"] = f"{frame.pages}/docs"
    return source


def summary(title: str, question: str, text: str) -> str:
    """One sentence that fits: the family's question, else what its first rule says, else the title."""
    for one in (question, text):
        sentence = _SENTENCE.match(one)
        if sentence and len(sentence[0]) <= MAX_SUMMARY:
            return sentence[0]
    return title if len(title) <= MAX_SUMMARY else f"{title[: MAX_SUMMARY - 1]}…"


def _detail(card: Card, held: Held) -> Iterator[str]:
    for section in card.sections:
        yield f"**{escaped(section.title)}**"
        yield ""
        if section.question:
            yield escaped(section.question)
            yield ""
        for text in dict.fromkeys(c.text for c in section.conclusions):
            yield f"- {escaped(text)}"
        yield ""
    yield from _rests_on(card.entries, held)
    yield from _list("Look again, cheapest first", (_look(look.item, look.action) for look in card.looks))
    yield from _list("Sources", dict.fromkeys(map(_basis, card.conclusions)))
    cutoffs = dict.fromkeys(words.cutoff(one) for c in card.conclusions for one in cutoffs_of(c.rule))
    yield from _list("Cut-offs", cutoffs)
    yield from _ending(held)


def _urgent_detail(card: Card, held: Held) -> Iterator[str]:
    yield from _rests_on(card.entries, held)
    yield from _ending(held)


def _rests_on(entries: Iterable[Item], held: Held) -> Iterator[str]:
    """The entries, each with its value, source and age (CDS Hooks asks for the freshness of the data)."""
    yield from _list(
        f"Entries, examination of {held.own.exam.time.start}", (_entry(item, held) for item in entries)
    )


def _entry(item: Item, held: Held) -> str:
    place = held.own.names.get(item.id) if item.of_exam else ""
    return words.entry(item) + (f" ({place})" if place else "")


def _look(item: Item, action: str) -> str:
    return f"{words.label(item.id)}: {action}"


def _basis(conclusion: Conclusion) -> str:
    return f"{conclusion.rule.source} ({conclusion.rule.seen}; {conclusion.rule.id})"


_NOTE: Final = "Please note"


def _ending(held: Held) -> Iterator[str]:
    yield from _list("Most rules are not meant for this patient and were not applied", limits(held.review))
    yield from _list("Sources disagree; both are kept, neither is used", _disputed(held))
    yield from _list("Unknown to this review", held.gaps)
    yield from _list(_NOTE, SAFETY_TEXTS)


def _disputed(held: Held) -> Iterable[str]:
    return dict.fromkeys(words.label(group[0].id) for group in held.review.disagreements)


def _list(heading: str, lines: Iterable[str]) -> Iterator[str]:
    items = [f"- {escaped(line)}" for line in lines]
    if items:
        yield from (f"{escaped(heading)}:", "", *items, "")


def _inserted(detail: str, lines: Iterable[str]) -> str:
    """Lines before the closing notes."""
    head, mark, tail = detail.rpartition(f"{_NOTE}:")
    return "".join((head, *(f"{line}\n\n" for line in lines), mark, tail))


def _asking(ask: Ask, held: Held, frame: Frame) -> dict[str, Any]:
    """The one line that asks for the rhythm, where no card carries it."""
    card: dict[str, Any] = {
        "uuid": frame.id("ask", ask.id),
        "summary": "Today's rhythm is not recorded; with it more could be said of this examination.",
        "indicator": "info",
        "detail": "\n".join([escaped(ask.text), "", *_ending(held)]),
        "source": _source(frame, "not-recorded", "Not recorded"),
    }
    if not frame.acts:
        card["suggestions"] = [rhythm_suggestion(frame, "ask")]
        card["selectionBehavior"] = "any"
    return card


def answered(code: str, system: str) -> Answer | None:
    """The answer that a coded override reason is; None for one of another system."""
    known: Mapping[str, Answer] = {answer.value: answer for answer in Answer}
    return known.get(code) if system == ANSWER_SYSTEM else None
