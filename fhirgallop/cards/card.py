"""Card: what is put before the clinician, independent of how it travels."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final, Literal

from fhirgallop.cards import words
from fhirgallop.cards.memory import Answer
from fhirgallop.cards.safety import SHORT
from fhirgallop.reasoning.conclusion import Conclusion, cutoffs_of
from fhirgallop.reasoning.conflicts import Look
from fhirgallop.reasoning.items import Item
from fhirgallop.reasoning.vocabulary import URGENT_PHRASE, Strength, Tier

Level = Literal["urgent", "interruptive", "advisory"]
_ALL: Final = (Answer.LOOKED_AGAIN, Answer.WILL_CORRECT, Answer.BOTH_TRUE, Answer.TRUE_IN_PATIENT)


@dataclass(frozen=True, slots=True)
class Section:
    """The conclusions of one card family: its title, its one question, and what each says."""

    title: str
    question: str
    conclusions: tuple[Conclusion, ...]


@dataclass(frozen=True, slots=True)
class Card:
    """One card.

    Attributes:
        level: urgent (the fixed phrase only), interruptive (asked once, never blocking) or advisory.
        sections: the families on it, its own first; others that would have interrupted are collapsed here.
        looks: what to look at again, cheapest first; empty on an urgent card.
    """

    level: Level
    sections: tuple[Section, ...]
    looks: tuple[Look, ...] = ()

    @property
    def conclusions(self) -> tuple[Conclusion, ...]:
        """Everything on it."""
        return tuple(c for section in self.sections for c in section.conclusions)

    @property
    def title(self) -> str:
        """Its headline; on an urgent card the fixed phrase, and nothing else ever."""
        return URGENT_PHRASE if self.level == "urgent" else self.sections[0].title

    @property
    def entries(self) -> tuple[Item, ...]:
        """Every entry that raised it, today's first."""
        grounds = (g for c in self.conclusions for g in (*c.subject, *c.grounds))
        return tuple(words.items(grounds))

    @property
    def key(self) -> str:
        """The same for the same rules and entries."""
        return digest("card", self.level, *sorted(entry_digest(c) for c in self.conclusions))

    @property
    def answers(self) -> tuple[Answer, ...]:
        """What may be answered; an urgent card can only be acknowledged."""
        if self.level == "urgent":
            return (Answer.LOOKED_AGAIN,)
        return _ALL if any(may_be_true(c) for c in self.conclusions) else _ALL[:-1]

    def as_dict(self) -> dict[str, Any]:
        """JSON values; an urgent card names entries only, no rule text, mechanism or source."""
        found: dict[str, Any] = {
            "level": self.level,
            "key": self.key,
            "title": self.title,
            "entries": words.entries(self.entries),
            "answers": [answer.value for answer in self.answers],
            "notice": SHORT,
        }
        if self.level != "urgent":
            found["sections"] = [_section(section) for section in self.sections]
            found["look_again"] = [{"entry": words.said(k.item), "how": k.action} for k in self.looks]
        return found


def _section(section: Section) -> dict[str, Any]:
    return {
        "title": section.title,
        "question": section.question,
        "lines": [
            {
                "text": c.text,
                "rule": c.rule.id,
                "cutoffs": [words.cutoff(one) for one in cutoffs_of(c.rule)],
                "strength": c.strength.value,
                "source": c.rule.source,
                "seen": c.rule.seen,
            }
            for c in section.conclusions
        ],
    }


def may_be_true(conclusion: Conclusion) -> bool:
    """True where "true in this patient" may silence it: never an urgent one, never a matter of definition."""
    return conclusion.tier is not Tier.U and conclusion.rule.strength is not Strength.HARD


def entry_digest(conclusion: Conclusion) -> str:
    """The same as long as rule and entries are the same."""
    return digest(conclusion.rule.id, *sorted(item.key for item in _items(conclusion)))


def combination_digest(conclusion: Conclusion) -> str:
    """The same as long as rule and what is said are the same, whenever it was said."""
    said = (f"{i.id}|{i.state}|{','.join(sorted(i.answers))}" for i in _items(conclusion))
    return digest(conclusion.rule.id, *sorted(set(said)))


def _items(conclusion: Conclusion) -> Sequence[Item]:
    return words.items((*conclusion.subject, *conclusion.grounds))


def digest(*parts: str) -> str:
    """Short digest of texts."""
    return hashlib.sha256("\n".join(parts).encode("utf-8", "replace")).hexdigest()[:24]
