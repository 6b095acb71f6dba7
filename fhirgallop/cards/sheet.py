"""The review as a sheet to read: first what is asked, then finding by finding what each needs and has."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Iterator
from textwrap import wrap
from typing import Final

from fhirgallop.cards import words
from fhirgallop.cards.card import Card
from fhirgallop.cards.opinion import left_out, limits
from fhirgallop.cards.policy import Decision
from fhirgallop.cards.safety import SAFETY_TEXTS
from fhirgallop.exam.exam import Exam
from fhirgallop.outcome import Issue
from fhirgallop.reasoning.conclusion import BEARING, Conclusion, Outcome, cutoffs_of
from fhirgallop.reasoning.review import Review
from fhirgallop.reasoning.vocabulary import Relation, Strength, Tier

WIDTH: Final = 96
_HEADINGS: Final = {"urgent": "NOW", "interruptive": "ONE QUESTION", "advisory": "TO CONSIDER"}
_OUTCOMES: Final = {
    Outcome.MET: "has what it needs",
    Outcome.UNMET: "needs, and the record says otherwise",
    Outcome.CONFLICT: "does not usually go with",
    Outcome.CONFIRMED: "is borne out by",
    Outcome.MISSING: "often comes with, not found here",
    Outcome.NOT_LOOKED_FOR: "often comes with, nobody looked for",
    Outcome.EXPLAINS: "could be explained by",
    Outcome.NOTE: "note",
    Outcome.OPEN: "not recorded, would matter",
}
_ORDER: Final = tuple(_OUTCOMES)
_UNKNOWN: Final = (Outcome.NOT_LOOKED_FOR, Outcome.OPEN)
MAX_UNKNOWN: Final = 3
MAX_GROUNDS: Final = 6


def sheet(exam: Exam, review: Review, decision: Decision, issues: Iterable[Issue] = ()) -> str:
    """The whole sheet as plain text.

    Args:
        exam: the examination.
        review: what the rules gave.
        decision: what the policy shows of it.
        issues: what the reading of the chart had to leave out; a sheet without it would promise too much.
    """
    lines = [f"Review of the examination of {exam.time.start}, with rules {review.rules_version}", ""]
    lines += _block("MOST RULES ARE NOT MEANT FOR THIS PATIENT AND WERE NOT APPLIED", limits(review))
    lines += _block("LEFT OUT OF THE CHART", left_out(issues))
    for card in decision.cards:
        lines += [*_card(card), ""]
    if not decision.cards:
        lines += ["Nothing to raise. That is no reassurance; see the end of this sheet.", ""]
    if decision.folded:
        lines += ["FURTHER, FOLDED", *(f"  {card.title}" for card in decision.folded), ""]
    if decision.ask:
        lines += [*_filled(decision.ask.text, ""), ""]
    lines += _findings(review)
    lines += _block(
        "LOOK AGAIN, CHEAPEST FIRST", (f"{words.said(k.item)}: {k.action}" for k in review.repair.looks)
    )
    lines += _block(
        "CHANGED SINCE THE LAST EXAMINATION",
        (
            f"{words.said(c.now)}; before: {words.said(c.before)} [{words.origin(c.before)}]"
            for c in review.changes
        ),
    )
    lines += _block(
        "SOURCES THAT DISAGREE (BOTH KEPT, NEITHER USED)",
        ("; ".join(words.entries(group)) for group in review.disagreements),
    )
    lines += _block("COULD NOT BE USED", words.entries(review.unusable))
    lines += _block("PLEASE NOTE", SAFETY_TEXTS)
    return "\n".join(lines).rstrip() + "\n"


def _card(card: Card) -> Iterator[str]:
    yield f"{_HEADINGS[card.level]}: {card.title}"
    if card.level != "urgent":
        for number, section in enumerate(card.sections):
            if number:
                yield f"  Also: {section.title}"
            for conclusion in section.conclusions:
                yield from _filled(conclusion.text, "  ")
            if section.question:
                yield from _filled(section.question, "  ")
    for entry in words.entries(card.entries):
        yield from _filled(entry, "  - ")
    for look in card.looks:
        yield from _filled(f"Look again: {words.label(look.item.id)}: {look.action}", "  ")
    if card.level != "urgent":
        cutoffs = dict.fromkeys(words.cutoff(one) for c in card.conclusions for one in cutoffs_of(c.rule))
        for basis in (
            *dict.fromkeys(map(_source, card.conclusions)),
            *(f"Cut-off: {text}" for text in cutoffs),
        ):
            yield from _filled(basis, "  ")
    yield f"  Answer: {' | '.join(answer.value.replace('-', ' ') for answer in card.answers)}"


def _source(conclusion: Conclusion) -> str:
    return f"Source: {conclusion.rule.source} ({conclusion.rule.seen}; {conclusion.rule.id})"


def _findings(review: Review) -> list[str]:
    """Every finding of today, with what each rule about it found; what a guard silenced is left out."""
    groups = (
        *review.prerequisites, *review.contradictions, *review.companions, *review.explanations,
        *review.notes, *review.open,
    )  # fmt: skip
    by_subject: dict[str, dict[Conclusion, None]] = {}
    for conclusion in groups:
        silent = conclusion.silenced_by or conclusion.merged_into or conclusion.rule.tier is Tier.U
        if conclusion.subject and not silent:
            by_subject.setdefault(words.said(conclusion.subject[0].item), {})[conclusion] = None
    lines = []
    left_out = 0
    for subject in sorted(by_subject):
        ordered = sorted(by_subject[subject], key=lambda c: (_ORDER.index(c.outcome), c.rule.id))
        about: list[str] = []
        for line in dict.fromkeys(_known(c) for c in ordered if c.outcome not in _UNKNOWN):
            about += _filled(line, "    ")
        for outcome in _UNKNOWN:
            said, more = _unknown(outcome, [c for c in ordered if c.outcome is outcome])
            about += said
            left_out += more
        if about:
            lines += [*_filled(subject, "  "), *about]
    if left_out:
        lines += _filled(f"Unrecorded things of less weight: {left_out}; the JSON form lists them all.", "  ")
    return ["FINDING BY FINDING", *lines, ""] if lines else []


def _known(conclusion: Conclusion) -> str:
    """What a rule found, and what it rests on besides the finding itself."""
    if conclusion.outcome is Outcome.NOTE:
        return f"note: {conclusion.text}"
    subject = {ground.item.key for ground in conclusion.subject}
    others = [g for g in conclusion.grounds if g.item.key not in subject]
    basis = "; ".join(dict.fromkeys(map(words.ground, others[:MAX_GROUNDS])))
    if len(others) > MAX_GROUNDS:
        basis += f"; and {len(others) - MAX_GROUNDS} more"
    return f"{_OUTCOMES[conclusion.outcome]}: {basis or conclusion.text}"


def _unknown(outcome: Outcome, conclusions: Iterable[Conclusion]) -> tuple[list[str], int]:
    """The few unrecorded data that weigh most, most asked for first; and how many are left out."""
    asked: Counter[str] = Counter()
    light: set[str] = set()
    for conclusion in conclusions:
        labels = {words.label(id_) for id_ in conclusion.unknown}
        if _weighs(conclusion):
            asked.update(sorted(labels))
        else:
            light |= labels
    named = [label for label, _ in asked.most_common(MAX_UNKNOWN)]
    more = len(light.union(asked).difference(named))
    return (_filled(f"{_OUTCOMES[outcome]}: {'; '.join(named)}", "    ") if named else []), more


def _weighs(conclusion: Conclusion) -> bool:
    """What a finding needs, what could interrupt, and companions that are more than weakly expected."""
    if conclusion.outcome is Outcome.OPEN:
        rule = conclusion.rule
        required = rule.relation is Relation.REQUIRES and rule.strength in BEARING
        # of what the examiner wrote down, nobody asks for further properties
        itself = any(datum.startswith(f"{rule.finding}#") for datum in conclusion.unknown)
        return (required or rule.tier is Tier.T1) and not itself
    return conclusion.strength in (Strength.HARD, Strength.STRONG, Strength.MODERATE)


def _block(heading: str, texts: Iterable[str]) -> list[str]:
    lines = [line for text in texts for line in _filled(text, "  - ")]
    return [heading, *lines, ""] if lines else []


def _filled(text: str, indent: str) -> list[str]:
    """Wrapped to the width, later lines under the first word; no control characters, for a terminal obeys."""
    text = "".join(letter if letter.isprintable() else " " for letter in text)
    later = " " * (len(indent) + 2)
    return wrap(text, WIDTH, initial_indent=indent, subsequent_indent=later, break_on_hyphens=False)
