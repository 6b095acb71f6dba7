"""The alert policy: which conclusions are put before the clinician, how loudly, and how often.

    decide(review, memory, encounter=..., now=...) -> Decision

1. Urgent combinations show the fixed phrase and the entries that raised them, once in an encounter for the
   same entries, and displace everything else.
2. At most one interruption an encounter; what else would interrupt is collapsed into the same card.
3. One card for a family, and one for a root cause: conflicts that one entry accounts for are listed together.
4. What was answered is silent for the encounter; what is true in this patient, for twelve months, unless it
   is urgent or a matter of definition. What was shown comes again only when an entry changes.
5. At most three advisory cards in view, the rest folded.
6. Unknown never alerts; one line may ask for the datum that would settle most, where that is more than one
   question or an urgent one.
7. In shadow mode all of this is worked out and logged, and nothing is shown.

Source: the alert policy of this project's evidence (over-alerting literature read there: override 46-96 %,
JMIR Med Inform 2020;8:e15653; acceptance falls with each repeat, BMC Med Inform Decis Mak 2017;17:36).
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any, Final, Literal

from fhirgallop.cards import words
from fhirgallop.cards.card import Card, Section, combination_digest, digest, entry_digest, may_be_true
from fhirgallop.cards.memory import Answer, Memory
from fhirgallop.cards.safety import SAFETY_TEXTS
from fhirgallop.reasoning.conclusion import Conclusion
from fhirgallop.reasoning.conflicts import HittingSet, Look
from fhirgallop.reasoning.review import Review
from fhirgallop.reasoning.rulebook import Rulebook, load
from fhirgallop.reasoning.vocabulary import Relation, Strength, Tier

Fate = Literal["shown", "folded", "displaced", "answered", "true-in-this-patient", "already-shown", "shadow"]
# Rank of what may interrupt (second reading of the rules): the atrial family, then arithmetic, then the rest.
_FIRST_FAMILIES: Final = ("atrial-contraction",)


@dataclass(frozen=True, slots=True)
class Policy:
    """What a site may set.

    Attributes:
        shadow: work everything out, log it, show nothing.
        interruptions: how many cards may interrupt in one encounter.
        advisory_in_view: how many advisory cards are in view before the rest is folded.
    """

    shadow: bool = False
    interruptions: Literal[0, 1] = 1
    advisory_in_view: int = 3


@dataclass(frozen=True, slots=True)
class LogLine:
    """What became of one conclusion; no patient's data."""

    rule: str
    tier: Tier
    fate: Fate


@dataclass(frozen=True, slots=True)
class Ask:
    """The one line that asks for what is unknown."""

    id: str
    text: str


@dataclass(frozen=True, slots=True)
class Decision:
    """What is shown, what is folded, what is asked, what became of everything, and what to remember.

    Attributes:
        cards: in view, loudest first.
        folded: advisory cards below the first three.
        ask: one question, where an open one could be settled.
        log: every conclusion that was raised, with its fate.
        memory: to be handed in next time.
        safety: texts that travel with it.
    """

    cards: tuple[Card, ...]
    folded: tuple[Card, ...]
    ask: Ask | None
    log: tuple[LogLine, ...]
    memory: Memory
    safety: tuple[str, ...] = SAFETY_TEXTS

    def as_dict(self) -> dict[str, Any]:
        """JSON values, without the memory."""
        return {
            "cards": [card.as_dict() for card in self.cards],
            "folded": [card.as_dict() for card in self.folded],
            "ask": self.ask.text if self.ask else None,
            "log": [{"rule": one.rule, "tier": one.tier.value, "fate": one.fate} for one in self.log],
            "safety": list(self.safety),
        }


def decide(
    review: Review,
    memory: Memory,
    *,
    encounter: str,
    now: datetime,
    policy: Policy | None = None,
    rules: Rulebook | None = None,
) -> Decision:
    """Apply the policy to a review.

    Args:
        review: what the rules gave.
        memory: the patient's; an empty one the first time.
        encounter: the encounter, or the examination where there is none.
        now: the moment, with a zone.
        policy: the site's settings.
        rules: the rules the review was made with.

    Raises:
        ValueError: no encounter is named.
    """
    if not encounter:
        raise ValueError("an encounter is needed: the policy counts by encounter")
    policy = policy or Policy()
    book = rules or load()
    log: list[LogLine] = []
    speaking = [c for c in review.raised if _may_speak(c, memory, encounter, now, log)]
    urgent = [c for c in review.urgent if c in speaking]
    if urgent:
        # all of them are listed, also those shown before: the card is read as a whole
        cards = [Card("urgent", (Section("", "", review.urgent),))]
        folded: list[Card] = []
        _note(log, (c for c in speaking if c.tier is not Tier.U), "displaced")
    else:
        quiet = policy.interruptions == 0 or encounter in memory.interrupted
        cards, folded = _cards(speaking, review, book, policy, interrupt=not quiet)
    ask = None if urgent else _ask(review, memory, encounter, book)
    _note(log, (c for card in cards for c in card.conclusions if c in speaking), "shown")
    _note(log, (c for card in folded for c in card.conclusions), "folded")
    if policy.shadow:
        shadowed = tuple(
            LogLine(line.rule, line.tier, "shadow") if line.fate in _VISIBLE else line for line in log
        )
        return Decision((), (), None, shadowed, memory)
    digests = [entry_digest(c) for card in (*cards, *folded) for c in card.conclusions]
    if ask is not None:
        digests.append(digest("ask", ask.id))
    interrupting = any(card.level != "advisory" for card in cards)
    remembered = memory.showing(encounter, digests, interrupting=interrupting) if digests else memory
    return Decision(tuple(cards), tuple(folded), ask, tuple(log), remembered)


_VISIBLE: Final = frozenset({"shown", "folded"})


def answer(memory: Memory, card: Card, given: Answer, *, encounter: str, now: datetime) -> Memory:
    """The memory after a clinician answered a card.

    "True in this patient" reaches only what may be silenced so; the rest is answered for the encounter.

    Raises:
        ValueError: the card does not offer that answer.
    """
    if given not in card.answers:
        raise ValueError(f"this card cannot be answered with {given.value}")
    memory = memory.answering(encounter, (entry_digest(c) for c in card.conclusions))
    if given is Answer.TRUE_IN_PATIENT:
        memory = memory.knowing((combination_digest(c) for c in card.conclusions if may_be_true(c)), now)
    return memory


def _may_speak(
    conclusion: Conclusion, memory: Memory, encounter: str, now: datetime, log: list[LogLine]
) -> bool:
    seen = entry_digest(conclusion)
    fate: Fate
    if memory.was_answered(encounter, seen):
        fate = "answered"
    elif may_be_true(conclusion) and memory.is_true(combination_digest(conclusion), now):
        fate = "true-in-this-patient"
    elif memory.was_shown(encounter, seen):
        fate = "already-shown"
    else:
        return True
    _note(log, (conclusion,), fate)
    return False


def _note(log: list[LogLine], conclusions: Iterable[Conclusion], fate: Fate) -> None:
    log += (LogLine(c.rule.id, c.tier, fate) for c in conclusions)


def _ask(review: Review, memory: Memory, encounter: str, book: Rulebook) -> Ask | None:
    datum = review.next_datum
    if datum is None or memory.was_shown(encounter, digest("ask", datum.id)):
        return None
    count = len(datum.settles)
    if count == 1 and book.rules[datum.settles[0]].tier is not Tier.U:
        return None
    settles = "one open question" if count == 1 else f"{count} open questions"
    return Ask(
        datum.id, f"Not recorded: {words.label(datum.id)}. It could settle {settles} ({datum.action})."
    )


@dataclass(frozen=True, slots=True)
class _Group:
    """Conclusions with one root cause, by family."""

    sections: tuple[Section, ...]
    looks: tuple[Look, ...]

    @property
    def conclusions(self) -> list[Conclusion]:
        return [c for section in self.sections for c in section.conclusions]

    @property
    def interrupts(self) -> bool:
        """True when one of them may interrupt; what is out of date never does."""
        return any(
            c.tier is Tier.T1 and not any(g.stale for g in (*c.subject, *c.grounds)) for c in self.conclusions
        )


def _cards(
    speaking: Sequence[Conclusion], review: Review, book: Rulebook, policy: Policy, *, interrupt: bool
) -> tuple[list[Card], list[Card]]:
    groups = sorted(_groups(speaking, review, book), key=_rank)
    loud = [group for group in groups if group.interrupts] if interrupt else []
    cards = []
    if loud:
        sections = tuple(section for group in loud for section in group.sections)
        looks = tuple(dict.fromkeys(look for group in loud for look in group.looks))
        cards.append(Card("interruptive", sections, looks))
    advisory = [Card("advisory", group.sections, group.looks) for group in groups if group not in loud]
    cards += advisory[: policy.advisory_in_view]
    return cards, advisory[policy.advisory_in_view :]


def _rank(group: _Group) -> tuple[bool, int, int, int, str]:
    first = group.conclusions
    families = [c.rule.family for c in first]
    known = [_FIRST_FAMILIES.index(name) for name in families if name in _FIRST_FAMILIES]
    strengths = tuple(Strength)
    return (
        not group.interrupts,
        min(known, default=len(_FIRST_FAMILIES)),
        int(not any(c.rule.relation is Relation.CHECK for c in first)),
        min(strengths.index(c.strength) for c in first),
        min(c.rule.id for c in first),
    )


def _groups(speaking: Sequence[Conclusion], review: Review, book: Rulebook) -> list[_Group]:
    """Families, joined where one entry is the root cause of conflicts of several."""
    by_family: dict[str, list[Conclusion]] = {}
    for conclusion in speaking:
        by_family.setdefault(conclusion.rule.family or conclusion.rule.id, []).append(conclusion)
    leader = {name: name for name in by_family}
    for root in _roots(speaking):
        touched = [name for name, held in by_family.items() if any(_touches(root, c) for c in held)]
        for name in touched:
            _join(leader, touched[0], name)
    joined: dict[str, list[str]] = {}
    for name in by_family:
        joined.setdefault(_top(leader, name), []).append(name)
    groups = []
    for names in joined.values():
        names.sort(key=lambda name: _loudest(by_family[name]))
        held = [c for name in names for c in by_family[name]]
        looks = (look for look in review.repair.looks if any(_touches(look.item.key, c) for c in held))
        sections = tuple(_section(name, by_family[name], book) for name in names)
        groups.append(_Group(sections, tuple(looks)))
    return groups


def _roots(speaking: Sequence[Conclusion]) -> tuple[str, ...]:
    """The fewest entries that touch every conflict in view: each is one root cause."""
    groups = list(dict.fromkeys(keys for c in speaking for keys in c.sets))
    counts = Counter(key for keys in groups for key in keys)
    ties = {key: (-count, 0.0, 0, key) for key, count in counts.items()}
    return HittingSet(groups, dict.fromkeys(counts, 1), ties).best()


def _touches(key: str, conclusion: Conclusion) -> bool:
    return any(key in keys for keys in conclusion.sets)


def _join(leader: dict[str, str], one: str, other: str) -> None:
    leader[_top(leader, other)] = _top(leader, one)


def _top(leader: dict[str, str], name: str) -> str:
    while leader[name] != name:
        name = leader[name]
    return name


def _loudest(conclusions: Sequence[Conclusion]) -> tuple[int, str]:
    tiers = tuple(Tier)
    return min((tiers.index(c.tier), c.rule.id) for c in conclusions)


def _section(name: str, conclusions: Sequence[Conclusion], book: Rulebook) -> Section:
    family = book.families.get(name)
    if family is None:
        return Section(words.label(conclusions[0].rule.finding), "", tuple(conclusions))
    return Section(family.title, family.question, tuple(conclusions))
