"""The review of one examination as JSON, for who sends it and shows the answer.

It stands alone: what was shown or answered before is not known here, so that each answer says everything.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Iterator
from datetime import datetime
from typing import Any, Final

from fhirgallop.cards import words
from fhirgallop.cards.memory import Memory
from fhirgallop.cards.policy import Decision, Policy, decide
from fhirgallop.cards.safety import SAFETY_TEXTS
from fhirgallop.chart.read import read_chart
from fhirgallop.exam.context import Context
from fhirgallop.exam.exam import Exam
from fhirgallop.outcome import Issue
from fhirgallop.reasoning.review import Review, review
from fhirgallop.reasoning.rulebook import Rulebook

_ALONE: Final = "No chart was sent along: the examination was held against itself only."
_CHART: Final = "The examination was held against the chart that was sent along, as far as it could be read."
_SHADOW: Final = "The rules run unseen here for now: whatever they raise, nothing is shown."
_NOTHING: Final = "Nothing was raised. That is no reassurance: see the limits and the safety texts."


def opine(
    exam: Exam, chart: Any, now: datetime, *, rules: Rulebook, policy: Policy, full: bool
) -> tuple[dict[str, Any], Decision]:
    """What the rules and the alert policy say of an examination, and the decision behind it for the log.

    Args:
        exam: the examination.
        chart: the patient's FHIR resources (see chart.read); None where none were sent.
        now: the moment of review, with a zone.
        rules: the rulebook.
        policy: the site's alert policy; in shadow mode nothing is shown.
        full: add every conclusion, also what no card shows.
    """
    context, issues = Context(now, (), exam.patient), tuple[Issue, ...]()
    if chart is not None:
        read = read_chart(chart, exam, now)
        context, issues = read.context, read.issues
    found = review(exam, context, rules=rules)
    encounter = exam.encounter.value if exam.encounter else exam.identifier
    decision = decide(
        found, Memory(exam.patient.value), encounter=encounter, now=now, policy=policy, rules=rules
    )
    said: dict[str, Any] = {
        "cards": [card.as_dict() for card in decision.cards],
        "folded": [card.as_dict() for card in decision.folded],
        "ask": decision.ask.text if decision.ask else None,
        "notices": list(_notices(decision, policy, alone=chart is None)),
        "limits": [] if policy.shadow else list(limits(found)),
        "left_out_of_chart": list(left_out(issues)),
        "rules_version": found.rules_version,
        "safety": list(SAFETY_TEXTS),
    }
    if full and not policy.shadow:
        said["conclusions"] = found.as_dict()
    return said, decision


def limits(found: Review) -> Iterator[str]:
    """Why most rules are not meant for this patient, where that is so."""
    for guard in found.limits:
        yield f"{'; '.join(words.entry(ground.item) for ground in guard.subject)}. {guard.rule.mechanism}"


def left_out(issues: Iterable[Issue]) -> Iterator[str]:
    """What of a chart could not be read, each sentence once."""
    counted = Counter(issue.text for issue in issues if issue.severity != "information")
    for text, count in counted.most_common():
        yield text if count == 1 else f"{text} ({count} places)"


def _notices(decision: Decision, policy: Policy, *, alone: bool) -> Iterator[str]:
    yield _ALONE if alone else _CHART
    if policy.shadow:
        yield _SHADOW
    elif not decision.cards:
        yield _NOTHING
