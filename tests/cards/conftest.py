"""Reviews from rules written for the purpose, so that the policy is tested apart from the medicine."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from datetime import datetime
from typing import Any

import pytest

from fhirgallop.cards.memory import Memory
from fhirgallop.cards.policy import Decision, Policy, decide
from fhirgallop.exam.context import Context, Fact, Source, State
from fhirgallop.exam.entry import Entry
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.reasoning.faults import Faults
from fhirgallop.reasoning.review import Review, review
from fhirgallop.reasoning.rulebook import Rulebook, build
from fhirgallop.reasoning.yaml_tree import parse

NOW = datetime.fromisoformat("2026-11-30T10:30:00+01:00")

# Three families with one rule each that may interrupt, five that may not, two urgent ones, one of definition.
RULES = """
windows:
  encounter: {within: 24 h, same-encounter: yes, beyond: unknown}
defaults:
  everything-else: encounter
families:
  one: {title: First family, question: "First question?"}
  two: {title: Second family, question: "Second question?"}
  three: {title: Third family, question: "Third question?"}
rechecks:
  - {source: ecg, cost: 3, reliability: 7, action: look at the strip}
  - {prefix: "", cost: 2, reliability: 2, action: listen again}
rules:
"""
RULE = """
  - id: {id}
    row: X-1
    relation: {relation}
    finding: {finding}
    other: {other}
    strength: {strength}
    tier: {tier}
    {family}
    source: "A source"
    seen: practice
    confidence: high
    mechanism: A mechanism.
    {wording}
"""


def rule(id_: str, finding: str, other: str, *, tier: str = "T1", strength: str = "strong", family: str = "",
         relation: str = "contradicts") -> str:  # fmt: skip
    """One rule of the made-up set."""
    return RULE.format(
        id=id_, finding=finding, other=other, tier=tier, strength=strength, relation=relation,
        family=f"family: {family}" if family else "note: none",
        wording="" if tier == "U" else f'wording: "About {id_}; listen again?"',
    )  # fmt: skip


DEFAULT = "".join(
    (
        rule("a.loud", "heart-sound.s4", "{fact: heart-sound.s3}", family="one"),
        rule("a.quiet", "heart-sound.s4", "{fact: thrill}", family="one", tier="T2", strength="moderate"),
        rule("b.loud", "heart-sound.opening-snap", "{fact: heart-sound.ejection-click}", family="two"),
        rule(
            "c.loud",
            "heart-sound.opening-snap",
            "{fact: heart-sound.venous-hum}",
            family="three",
            strength="hard",
        ),
        *(
            rule(f"d{n}.quiet", subject, f"{{fact: {fact}}}", tier="T2", strength="moderate")
            for n, (subject, fact) in enumerate(
                (
                    ("murmur.systolic", "general.pallor"),
                    ("bruit.carotid", "general.jaundice"),
                    ("lung.crackles", "general.ascites"),
                    ("oedema.sacral", "general.clubbing"),
                    ("jvp.kussmaul", "general.hepatomegaly"),
                )
            )
        ),
        rule("u.first", "murmur.diastolic", "{fact: symptom.syncope}", tier="U", relation="suggests"),
        rule("u.second", "murmur.diastolic", "{fact: symptom.chest-pain}", tier="U", relation="suggests"),
    )
)


def rulebook(rules: str = DEFAULT) -> Rulebook:
    """A rulebook of the made-up rules."""
    faults = Faults("made-up.yaml")
    tree = parse(RULES + rules, faults)
    assert tree is not None, faults.issues
    book, issues = build({"made-up.yaml": tree}, None)
    assert book is not None, issues
    return book


@dataclass
class Bedside:
    """One patient at the bedside: what was found, and what the policy makes of it."""

    book: Rulebook
    memory: Memory
    now: datetime = NOW
    policy: Policy | None = None

    def review(self, *present: str, chart: Mapping[str, str] | None = None) -> Review:
        """A review of an examination with these signs present; `chart` adds facts by id and time."""
        exam = Exam(
            Party("p"), "x", "", Moment("2026-11-30T10:00:00+01:00"), tuple(Entry(id_) for id_ in present)
        )
        facts = tuple(
            Fact(id_, State.PRESENT, Source.OTHER, time=time) for id_, time in (chart or {}).items()
        )
        return review(exam, Context(NOW, facts, None), rules=self.book)

    def see(self, *present: str, encounter: str = "e1", chart: Mapping[str, str] | None = None) -> Decision:
        """What is shown; the memory is kept."""
        decision = decide(
            self.review(*present, chart=chart), self.memory,
            encounter=encounter, now=self.now, policy=self.policy, rules=self.book,
        )  # fmt: skip
        self.memory = decision.memory
        return decision


@pytest.fixture(scope="session")
def _book() -> Rulebook:
    return rulebook()


@pytest.fixture
def bedside(_book: Rulebook) -> Bedside:
    """A patient nobody has seen yet."""
    return Bedside(_book, Memory("p"))


@pytest.fixture
def bedside_with(bedside: Bedside) -> Callable[..., Bedside]:
    """The same under a site's policy."""
    return lambda **settings: replace(bedside, policy=Policy(**settings))


@pytest.fixture(scope="session")
def made_up() -> Callable[..., Any]:
    """A rulebook of rules given as text, and the maker of one rule's text."""
    return lambda *rules: rulebook("".join(rules))


@pytest.fixture(scope="session")
def one_rule() -> Callable[..., str]:
    """The text of one made-up rule."""
    return rule
