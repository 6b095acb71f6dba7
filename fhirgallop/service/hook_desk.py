"""Answers CDS Hooks calls and takes feedback, with the memory of what was shown kept between them.

The memory is a patient's; what was shown counts by encounter and user, so that nobody misses a card because
somebody else opened the chart before. What was answered counts for every user of the encounter, but for an
urgent card. The same hookInstance is answered alike again.
"""

from __future__ import annotations

import logging
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any, Final

from fhirgallop.cards import build
from fhirgallop.cards.build import Shown
from fhirgallop.cards.card import digest
from fhirgallop.cards.discovery import Service
from fhirgallop.cards.feedback import Feedback, remembering
from fhirgallop.cards.frame import Frame
from fhirgallop.cards.hooks import Call
from fhirgallop.cards.memory import Memory
from fhirgallop.cards.policy import Decision, Policy, decide
from fhirgallop.cards.today import Held, hold
from fhirgallop.codes import fhirjson
from fhirgallop.observations.bundle import instant
from fhirgallop.outcome import Issue
from fhirgallop.reasoning.rulebook import Rulebook
from fhirgallop.service.examinations import BusyError
from fhirgallop.service.metrics import Metrics
from fhirgallop.storage.hooks import HookStore, KeptCard, KeptFeedback, KeptMemory
from fhirgallop.storage.submissions import Also

log: Final = logging.getLogger("fhirgallop.service")

_TRIES: Final = 8


@dataclass(frozen=True, slots=True)
class Manner:
    """What a site may set of its cards: the alert policy, and how cards are drawn (see Frame).

    `acting` names the clients that take system actions.
    """

    policy: Policy
    critical: bool
    pages: str
    acting: frozenset[str] = frozenset()


@dataclass(frozen=True, slots=True)
class _Asked:
    """One call on its way, with the digests it is remembered under, and the CDS client it came from.

    `visit` is the encounter's, `encounter` the encounter's for this user alone.
    """

    service: Service
    call: Call
    held: Held
    now: datetime
    patient: str
    visit: str
    encounter: str
    instance: str
    client: str
    also: tuple[Also, ...]


class HookDesk:
    """Calls in, cards out; feedback in, counts out."""

    def __init__(
        self,
        store: HookStore,
        clock: Callable[[], datetime],
        rules: Rulebook,
        manner: Manner,
        metrics: Metrics,
        tally: Callable[[Mapping[tuple[str, str], int]], None] = lambda _: None,
    ) -> None:
        """`tally` is told what the rules raised, by rule and fate, as the metrics are."""
        self._store = store
        self._clock = clock
        self.rules: Final = rules
        self._manner = manner
        self._metrics = metrics
        self._tally = tally

    def answer(
        self, service: Service, call: Call, draft: Mapping[str, Any] | None, client: str, *also: Also
    ) -> tuple[dict[str, Any], list[Issue]]:
        """The answer to one call, with its cards; with an issue that is an error, none.

        Args:
            service: what is called.
            call: a call without faults.
            draft: the draft examination, where the hook brings one.
            client: name of the CDS client; empty where there is no authorisation.
            also: what is kept in one transaction with the cards, where cards are kept.

        Raises:
            BusyError: other requests kept changing what is remembered of this patient.
            StorageError: the database failed.
        """
        now = self._clock()
        held, issues = hold(call, draft, now, self.rules)
        if held is None:
            return {"cards": []}, issues
        patient = patient_of(call)
        exam = held.own.exam
        visit = digest("encounter", patient, exam.encounter.value if exam.encounter else exam.time.start)
        asked = _Asked(
            service, call, held, now, patient,
            visit, digest("user", visit, call.user),
            digest("instance", service.id, patient, call.instance), client, also,
        )  # fmt: skip
        for _ in range(_TRIES):
            found = self._shown(asked)
            if found is not None:
                return found, []
        raise BusyError

    def _shown(self, asked: _Asked) -> dict[str, Any] | None:
        """The answer, with its cards remembered; None when another request changed the memory meanwhile."""
        kept = self._store.memory(asked.patient)
        current = _memory(kept.memory) if kept else Memory(asked.patient)
        earlier = self._store.before(asked.instance)
        before = _memory(earlier) if earlier is not None else current
        decision = self._decide(asked, before)
        after = decision.memory if before is current else self._decide(asked, current).memory
        call = asked.call
        manner = self._manner
        acts = asked.client in manner.acting
        frame = Frame(call.instance, call.patient, call.encounter, manner.critical, manner.pages, acts)
        answer, shown = build.answer(decision, asked.held, frame)
        if not shown:
            self._note(asked.service, decision)
            return answer
        known = self._store.cards([one.uuid for one in shown]) if earlier is not None else {}
        if after != current or any(one.uuid not in known for one in shown):
            stored = self._store.keep(
                KeptMemory(asked.patient, kept.version if kept else 0, _bytes(after)),
                instance=asked.instance,
                before=_bytes(before),
                cards=[_kept(one, asked) for one in shown],
                also=asked.also,
            )
            if not stored:
                return None
        self._note(asked.service, decision)
        return answer

    def _decide(self, asked: _Asked, memory: Memory) -> Decision:
        answered = dict(memory.answered).get(asked.visit)
        return decide(
            asked.held.review,
            memory.answering(asked.encounter, answered) if answered else memory,
            encounter=asked.encounter,
            now=asked.now,
            policy=self._manner.policy,
            rules=self.rules,
        )

    def take(self, service: Service, reports: Sequence[Feedback]) -> list[str]:
        """Keeps what a client reports, each report once, and remembers what was answered.

        Returns:
            Digests of the patients whose cards were reported on.

        Raises:
            BusyError: other requests kept changing what is remembered of a patient.
            StorageError: the database failed; the reports may be sent again.
        """
        now = self._clock()
        cards = self._store.cards(list(dict.fromkeys(report.card for report in reports)))
        own = {id_: card for id_, card in cards.items() if card.service == service.id}
        new = self._store.new_feedback([report.key for report in reports])
        for report in reports:
            # the memory first: after a failure the report is sent again, and nothing is remembered twice
            if report.key in new and report.card in own:
                self._answered(own[report.card], report, now)
        rows = [_report(report, service, report.card in own, now) for report in reports]
        if not any(self._store.add_feedback(rows) for _ in range(_TRIES)):
            raise BusyError
        for report in reports:
            if report.key in new and report.card in own:
                for rule in _shown_of(own[report.card]).rules:
                    self._metrics.card_answer(rule, report.outcome)
        return list(dict.fromkeys(card.patient for card in own.values()))

    def _answered(self, card: KeptCard, report: Feedback, now: datetime) -> None:
        if report.answer is None:
            return
        shown = _shown_of(card)
        for _ in range(_TRIES):
            kept = self._store.memory(card.patient)
            current = _memory(kept.memory) if kept else Memory(card.patient)
            after = remembering(current, shown, report.answer, encounter=card.encounter, now=now)
            if after == current or self._store.keep(
                KeptMemory(card.patient, kept.version if kept else 0, _bytes(after))
            ):
                return
        raise BusyError

    def _note(self, service: Service, decision: Decision) -> None:
        """What became of each rule: ids and fates, no patient's data."""
        fates: Counter[tuple[str, str]] = Counter((line.rule, line.fate) for line in decision.log)
        self._metrics.raised(fates)
        self._tally(fates)
        said = ", ".join(f"{rule}={fate}" for rule, fate in sorted(fates))
        log.info("hook %s: %s", service.id, said or "nothing raised")

    def counts(self) -> dict[str, Any]:
        """How often the cards of each rule were accepted and overridden, and for which of our reasons."""
        outcomes: dict[str, Counter[str]] = {}
        unmatched = 0
        for tally in self._store.tallies():
            if tally.shown is None:
                unmatched += 1
                continue
            known = build.answered(tally.reason, tally.reason_system)
            for rule in fhirjson.read(tally.shown)[0]["rules"]:
                counter = outcomes.setdefault(rule, Counter())
                counter[tally.outcome] += 1
                if known and tally.outcome == "overridden":
                    counter[known.value] += 1
        rules = [{"rule": rule, **dict(sorted(found.items()))} for rule, found in sorted(outcomes.items())]
        return {"rules": rules, "unmatched": unmatched}


def patient_of(call: Call) -> str:
    """The digest that a call's patient is remembered under."""
    return digest("patient", call.server, call.patient)


def _memory(text: bytes) -> Memory:
    return Memory.from_dict(fhirjson.read(text)[0])


def _bytes(memory: Memory) -> bytes:
    return fhirjson.write(memory.as_dict())


def _kept(shown: Shown, asked: _Asked) -> KeptCard:
    value = {"rules": shown.rules, "entries": shown.entries, "combinations": shown.combinations,
             "shared": shown.shared}  # fmt: skip
    text = fhirjson.write(value)
    encounter = asked.visit if shown.shared else asked.encounter
    return KeptCard(shown.uuid, asked.service.id, asked.patient, encounter, text, instant(asked.now))


def _shown_of(card: KeptCard) -> Shown:
    value = fhirjson.read(card.shown)[0]
    return Shown(
        card.card,
        tuple(value["rules"]),
        tuple(value["entries"]),
        tuple(value["combinations"]),
        value["shared"],
    )


def _report(report: Feedback, service: Service, matched: bool, now: datetime) -> KeptFeedback:
    return KeptFeedback(
        key=report.key,
        service=service.id,
        card=report.card,
        matched=matched,
        outcome=report.outcome,
        suggestions=fhirjson.write(report.suggestions),
        reason=report.reason,
        reason_system=report.reason_system,
        comment=report.comment,
        at=report.at,
        received=instant(now),
    )
