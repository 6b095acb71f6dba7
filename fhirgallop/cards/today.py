"""Today's examination among what a client sent, held against the rest of it.

Today's is the newest examination of ours within the rules' encounter window (24 h), of this encounter or of
none that is named. A draft is today's by its hook. Only what can be followed to the patient is used.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import datetime, timedelta
from typing import Any, Final

from fhirgallop.cards.hooks import Call
from fhirgallop.chart.gather import Found, gather
from fhirgallop.chart.log import Log
from fhirgallop.chart.own_exam import Gathered, OwnExam, gather_own_exams, read_own_exam
from fhirgallop.chart.read import read_gathered
from fhirgallop.chart.times import Times
from fhirgallop.chart.whose import Whose, recognise
from fhirgallop.exam.exam import Party
from fhirgallop.exam.moment import Moment
from fhirgallop.outcome import Issue, has_errors
from fhirgallop.reasoning.items import moment
from fhirgallop.reasoning.review import Review, review
from fhirgallop.reasoning.rulebook import Rulebook

_WINDOW: Final = "encounter"
_DAY: Final = 86_400
# The clock of a client that writes a draft may be ahead of ours by a little.
_AHEAD: Final = timedelta(minutes=10)
_NOTED: Final = {
    "chart-part-missing": "a part or a page of what was asked for was not sent",
    "chart-other-patient": "something was sent that is not known to be this patient's; it was not used",
    "chart-no-patient": "something was sent that does not say whose it is; it was not used",
    "chart-too-large": "more was sent than is read",
}
# of things that have a meaning here; what has none is no gap
_UNREADABLE: Final = {
    "chart-unit": "a number by its unit",
    "chart-number": "a number",
    "chart-time": "a time",
    "chart-future": "something of a time that has not come",
    "chart-birth-date": "the date of birth",
    "chart-modifier": "something that an unknown extension changes the meaning of",
}


@dataclass(frozen=True, slots=True)
class Held:
    """Today's examination and its review.

    Attributes:
        own: the examination, with the Observations it was read from.
        review: what the rules gave.
        gaps: what stayed unknown because it was not sent or could not be used, in words.
    """

    own: OwnExam
    review: Review
    gaps: tuple[str, ...]


def hold(
    call: Call, draft: Mapping[str, Any] | None, now: datetime, rules: Rulebook
) -> tuple[Held | None, list[Issue]]:
    """Today's examination held against the chart; None when there is none, or with errors.

    Args:
        call: a checked call.
        draft: the Bundle of the draft examination, where the hook brings one.
        now: the moment, with a zone.
        rules: the rules in force.
    """
    log = Log()
    party = Party(call.patient, is_fhir_id=True)
    chart = gather(call.prefetch.usable, log)
    drafted = gather(draft, log) if draft is not None else []
    base = _base(call, chart)
    whose = recognise(party, [*chart, *drafted], base, log)
    if draft is not None:
        own, issues = _of_draft(drafted, whose, Times(now + _AHEAD, log), log)
    else:
        own, issues = _of_chart(call, [f for f in chart if whose.owns(f)], whose, (now, rules, log)), []
    if own is None or has_errors(issues):
        return None, issues
    if own.exam.encounter is None and call.encounter:
        own = replace(own, exam=replace(own.exam, encounter=Party(call.encounter, is_fhir_id=True)))
    used = {id(found) for found in own.found}
    rest = [found for found in chart if id(found) not in used]
    read = read_gathered(rest, own.exam, now, log, base=base)
    found = review(own.exam, read.context, rules=rules)
    return Held(own, found, tuple(_gaps(call, read.issues))), []


def _base(call: Call, chart: Sequence[Found]) -> str:
    """The server's address; that of the searches, where a server goes by another name inside its house."""
    bases = {found.base for found in chart if found.base}
    return bases.pop() if len(bases) == 1 else call.server


def _of_chart(
    call: Call, ours: Sequence[Found], whose: Whose, at: tuple[datetime, Rulebook, Log]
) -> OwnExam | None:
    now, rules, log = at
    within = rules.windows[_WINDOW].within or _DAY
    exams = [one for one in gather_own_exams(ours, Times(now, log)) if _is_todays(one, call, now, within)]
    for newest in sorted(exams, key=lambda one: (-(moment(one.start) or 0), one.encounter)):
        own = read_own_exam(newest, whose.party, log)
        if own.exam.entries:
            return own
    return None


def _is_todays(one: Gathered, call: Call, now: datetime, within: int) -> bool:
    if one.encounter and call.encounter and one.encounter != call.encounter:
        return False
    time = Moment(one.start)
    start = moment(one.start) if time.precise_to_day else None
    # a day without a time of day may have been any hour of it, in any zone
    return start is not None and now.timestamp() - start <= within + (0 if time.has_clock else _DAY)


def _of_draft(
    drafted: Sequence[Found], whose: Whose, times: Times, log: Log
) -> tuple[OwnExam | None, list[Issue]]:
    place = "context.draftObservations"
    observations = [found for found in drafted if found.type == "Observation"]
    if not all(whose.owns(found) for found in observations):
        words = (
            "An Observation of the draft cannot be followed to context.patientId; refer to Patient/id, or by "
            "an identifier that the prefetched Patient has. Nothing was evaluated."
        )
        return None, [Issue("error", "business-rule", "hook-other-patient", words, field=place)]
    read = [read_own_exam(one, whose.party, log) for one in gather_own_exams(observations, times)]
    exams = [own for own in read if own.exam.entries]
    if len(exams) != 1:
        words = (
            "The draft holds several examinations; send one."
            if exams
            else "The draft holds no Observation of fhirgallop's code systems with a time that has come; "
            "send those that POST /exams answers, or record and map."
        )
        return None, [Issue("error", "required", "hook-draft-exam", words, field=place)]
    return exams[0], []


def _gaps(call: Call, issues: Iterable[Issue]) -> list[str]:
    rules = {issue.rule for issue in issues}
    unread = [words for rule, words in _UNREADABLE.items() if rule in rules]
    return [
        *call.prefetch.gaps(),
        *(words for rule, words in _NOTED.items() if rule in rules),
        *([f"sent, and not used because it could not be read: {', '.join(unread)}"] if unread else []),
    ]
