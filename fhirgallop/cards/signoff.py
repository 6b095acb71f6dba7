"""The clinician's sign-off sheet, made from the rules: what is shown, why, and how the source is known.

Every rule that interrupts, advises or calls for urgent review is to be signed by a clinician of the site
before it is shown to anybody.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Final

from fhirgallop.cards import words
from fhirgallop.cards.conditions import UNSAID, in_words
from fhirgallop.cards.safety import SAFETY_TEXTS
from fhirgallop.reasoning.conclusion import cutoffs_of
from fhirgallop.reasoning.rule import Rule
from fhirgallop.reasoning.rulebook import Rulebook
from fhirgallop.reasoning.vocabulary import Relation, Tier

_TIERS: Final = (
    (
        Tier.U,
        "Urgent",
        "Shown as the fixed phrase alone, with the entries that raised it. Displaces all other cards.",
    ),
    (Tier.T1, "Interruptive", "Asked once in an encounter, never blocking. One such card an encounter."),
    (Tier.T2, "Advisory", "Passive; at most three in view."),
)
_OTHER: Final = {
    Relation.REQUIRES: "Needs",
    Relation.CONTRADICTS: "Does not go with",
    Relation.CHECK: "Asked about when",
    Relation.EXPECTS: "Comes with",
    Relation.SUGGESTS: "Together with",
    Relation.FOLLOWS: "Follows on",
    Relation.GUARD: "Together with",
}
_SEEN: Final = {
    "excerpt": "abstract or excerpt read",
    "memory": "from memory of published literature, not read again",
    "practice": "common practice, no source",
    "definition": "definition",
}
_READING: Final = {
    "": "none",
    "supports": "supports it",
    "supports-with-limits": "supports it with limits",
    "contradicts": "contradicts it",
    "not-found": "found nothing",
}


def signoff_sheet(book: Rulebook) -> str:
    """The sheet as Markdown."""
    return "\n".join(_lines(book)).rstrip() + "\n"


def rule_text(rule: Rule, book: Rulebook) -> str:
    """One rule as the sheet shows it."""
    return "\n".join(_rule(rule, book)) + "\n"


def _lines(book: Rulebook) -> Iterator[str]:
    yield "# Rules for local review before use"
    yield ""
    yield f"Rules {book.version}. Sign each before it is shown to anybody, or silence or soften it on site."
    yield ""
    yield from (f"- {text}" for text in (*SAFETY_TEXTS, UNSAID))
    for tier, title, meaning in _TIERS:
        rules = [r for r in book.rules.values() if r.tier is tier and r.id not in book.silenced]
        yield ""
        yield f"## {title} ({len(rules)})"
        yield ""
        yield meaning
        for rule in sorted(rules, key=lambda r: (r.family, r.id)):
            yield ""
            yield from _rule(rule, book)


def _rule(rule: Rule, book: Rulebook) -> Iterator[str]:
    yield f"### {rule.id}"
    yield ""
    family = book.families.get(rule.family)
    rows = (
        ("Finding", in_words(rule.subject)),
        ("Only when", in_words(rule.when) if rule.when else ""),
        (_OTHER[rule.relation], in_words(rule.other) if rule.other else ""),
        ("Silent where", in_words(rule.unless) if rule.unless else ""),
        ("Holds also in", ", ".join(sorted(rule.holds_in))),
        ("Relation, strength", f"{rule.relation.value}, {rule.strength.value}"),
        ("Card", family.title if family else "of its own"),
        ("Shown", "urgent clinical review" if rule.tier is Tier.U else rule.wording),
        ("Why", rule.mechanism),
        ("Source", rule.source),
        ("How it was seen", _SEEN[rule.seen]),
        ("Second reading", _READING.get(rule.reading, rule.reading)),
        ("Confidence", rule.confidence),
        ("Cut-offs", "; ".join(words.cutoff(cutoff) for cutoff in cutoffs_of(rule))),
        ("Note", rule.note),
        ("Rows of the evidence", ", ".join(rule.rows)),
    )
    yield "| | |"
    yield "|---|---|"
    yield from (f"| {name} | {_cell(text)} |" for name, text in rows if text)
    yield "| To be shown here | yes / no / softened to: |"
    yield "| Signed, date | |"


def _cell(text: str) -> str:
    """Text inside a table cell of Markdown."""
    return text.replace("\\", "\\\\").replace("|", "\\|").replace("\n", " ")
