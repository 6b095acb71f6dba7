"""From the records of one request to its answer: Bundle, issues and review; a list; an acknowledgement."""

from __future__ import annotations

import hashlib
import logging
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any, Final, Literal

import msgspec
from sqlalchemy import Connection

from fhirgallop.cards.opinion import opine
from fhirgallop.cards.policy import Policy
from fhirgallop.codes import fhirjson
from fhirgallop.intake.hl7_ack import ack
from fhirgallop.intake.reading import Read
from fhirgallop.intake.record import LocalRecord
from fhirgallop.outcome import Issue, has_errors, operation_outcome, ordered
from fhirgallop.reasoning.rulebook import Rulebook
from fhirgallop.service import answers
from fhirgallop.service.examinations import Along, BusyError, Coded, Examinations, Wish
from fhirgallop.service.guard import STORAGE_FAILED
from fhirgallop.service.keyed import KeyDesk, Keyed, KeyTakenError, Reply
from fhirgallop.storage.submissions import Also, StorageError

log: Final = logging.getLogger("fhirgallop.service")

Opinion = Literal["none", "short", "full"]

BUSY: Final = Issue(
    "error", "conflict", "exam-busy", "This examination is being changed by other requests; send it again."
)
_IN_PART: Final = Issue(
    "error", "business-rule", "hl7-taken-in-part",
    "Some examinations of this message were taken, others not; send the message again when it is corrected.",
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class Ask:
    """What a request asks for beside its records.

    Attributes:
        wish: how its records are to be coded.
        answer: media type of the answer: the envelope's, the bare Bundle's, or an HL7 acknowledgement's.
        opinion: how much of a review goes into the envelope; None: short for one, none for several.
        chart: the patient's FHIR resources, where they were sent along.
        keyed: the sender's key, where there is one.
        watched: what keeps the audit event of a result in the transaction of it.
    """

    wish: Wish
    answer: str
    opinion: Opinion | None
    chart: Any
    keyed: Keyed | None
    watched: Callable[[Coded], Also]


class ExamDesk:
    """Answers requests that hold examinations."""

    def __init__(
        self,
        examinations: Examinations,
        keys: KeyDesk,
        clock: Callable[[], datetime],
        rules: Rulebook,
        policy: Policy,
        count: Callable[[str, str], None],
    ) -> None:
        """`count` is told the map's name and the fate of each record, for the metrics."""
        self._examinations = examinations
        self._keys = keys
        self._clock = clock
        self._rules = rules
        self._policy = policy
        self._count = count

    def again(self, asked: Keyed | None) -> Reply | None:
        """The answer that a request with this key got before; None where there is none."""
        return self._keys.again(asked) if asked else None

    def one(self, record: Read, ask: Ask) -> Reply:
        """One examination: the envelope, or the bare Bundle.

        Raises:
            RefusalError: 422, the record cannot be coded; or the key was another request's.
            BusyError: other requests keep changing the same examination.
            StorageError: the database failed; nothing was kept.
        """
        assert isinstance(record, LocalRecord)  # noqa: S101 - the caller made sure
        replies: list[Reply] = []

        def along(coded: Coded) -> Sequence[Also]:
            watched = ask.watched(coded)
            if coded.bundle is None:  # the guard sees a refusal, and keeps the event of it
                return ()
            replies[:] = [self._reply(coded, ask)]
            return (watched, *self._kept(ask.keyed, replies[0]))

        try:
            coded = self.coded(record, ask.wish, along)
        except KeyTakenError:
            if ask.keyed and (reply := self._keys.again(ask.keyed)):
                return reply
            raise BusyError from None
        if coded.bundle is None:
            raise answers.RefusalError(422, coded.result.issues)
        return replies[0]

    def several(self, reads: Sequence[Read], ask: Ask) -> Reply:
        """Several examinations: a result each, in order; each is kept by itself.

        Raises:
            RefusalError: the key was another request's.
            StorageError: the key could not be reserved.
        """
        if ask.keyed and (reply := self._keys.reserve(ask.keyed)):
            return reply
        results = list(self._each(reads, ask))
        coded = sum(result["status"] == "coded" for result in results)
        body = {"coded": coded, "refused": len(results) - coded, "results": results}
        reply = Reply(fhirjson.write(body), answers.PLAIN_JSON)
        # what could not be stored may be sent again under the same key
        if ask.keyed and not any(result["status"] == "not-stored" for result in results):
            self._keys.finish(ask.keyed, reply)
        return reply

    def acknowledged(self, message: bytes, reads: Sequence[Read], ask: Ask) -> Reply:
        """An HL7 v2 message: what was taken of it, and everything that was wrong with it, as an ACK.

        Raises:
            RefusalError: the key was another request's.
            BusyError: other requests keep changing an examination of it.
            StorageError: the database failed; examinations that come before in the message may be kept.
        """
        if ask.keyed and (reply := self._keys.reserve(ask.keyed)):
            return reply
        issues: list[Issue] = []
        taken = 0
        for read in reads:
            if isinstance(read, LocalRecord):
                coded = self.coded(read, ask.wish, lambda coded: (ask.watched(coded),))
                taken += coded.bundle is not None
                issues += coded.result.issues
            else:
                issues += read.issues
        if taken and has_errors(issues):
            issues.append(_IN_PART)
        now = self._clock()
        # unique enough for MSH-10 (20 characters in v2.5), and made of nothing that is secret
        number = hashlib.sha256(message + now.isoformat().encode()).hexdigest()[:20]
        reply = Reply(ack(message, ordered(issues), control_id=number, now=now), ask.answer)
        if ask.keyed and taken:
            self._keys.finish(ask.keyed, reply)
        elif ask.keyed:
            self._keys.release(ask.keyed)
        return reply

    def told(self, coded: Coded, opinion: Opinion, chart: Any = None) -> dict[str, Any]:
        """One result as the envelope has it."""
        said: dict[str, Any] = {}
        if coded.bundle is not None:
            said["bundle"] = msgspec.Raw(coded.bundle)
        said["outcome"] = operation_outcome(coded.result.issues)
        if coded.bundle is not None and coded.result.exam is not None and opinion != "none":
            now = datetime.fromtimestamp(coded.at / 1000, tz=UTC)
            said["review"], decision = opine(
                coded.result.exam, chart, now,
                rules=self._rules, policy=self._policy, full=opinion == "full",
            )  # fmt: skip
            fates = Counter(f"{line.rule}={line.fate}" for line in decision.log)
            if fates:
                log.info("review: %s", ", ".join(sorted(fates)))
        said["unread"] = coded.result.unread
        said["unknown"] = [{"field": u.field, "value": u.value} for u in coded.result.unknown]
        return said

    def coded(self, record: LocalRecord, wish: Wish, along: Along) -> Coded:
        """One record coded, kept and counted; raises as Examinations.code does."""
        coded = self._examinations.code(record, wish, along)
        fate = "refused" if coded.bundle is None else "repeated" if coded.repeated else "coded"
        self._count(wish.template.name, fate)
        return coded

    def _reply(self, coded: Coded, ask: Ask) -> Reply:
        if ask.answer == answers.FHIR_JSON:
            count = {"Fhirgallop-Issues": str(len(coded.result.issues))}
            return Reply(coded.bundle or b"", ask.answer, count, patient=coded.patient)
        body = fhirjson.write(self.told(coded, ask.opinion or "short", ask.chart))
        return Reply(body, answers.PLAIN_JSON, patient=coded.patient)

    def _kept(self, asked: Keyed | None, reply: Reply) -> Sequence[Also]:
        if asked is None:
            return ()
        add = self._keys.keep(asked, reply)

        def keep(connection: Connection, _row: int) -> None:
            add(connection)

        return (keep,)

    def _each(self, reads: Sequence[Read], ask: Ask) -> Iterator[dict[str, Any]]:
        """A result a record; after the database has failed once, no other record waits for it."""
        failed = False
        for read in reads:
            if not isinstance(read, LocalRecord):
                self._count(ask.wish.template.name, "unreadable")
                yield {"line": read.line, "status": "unreadable", "outcome": operation_outcome(read.issues)}
                continue
            issue = STORAGE_FAILED
            coded = None
            try:
                if not failed:
                    coded = self.coded(read, ask.wish, lambda coded: (ask.watched(coded),))
            except BusyError:
                issue = BUSY
            except StorageError:
                failed = True
            if coded is None:
                self._count(ask.wish.template.name, "not-stored")
                yield {"line": read.line, "status": "not-stored", "outcome": operation_outcome([issue])}
            else:
                status = "coded" if coded.bundle else "refused"
                yield {"line": read.line, "status": status, **self.told(coded, ask.opinion or "none")}
