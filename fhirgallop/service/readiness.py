"""Whether this process can do its work now, part by part, with the reason where it cannot."""

from __future__ import annotations

import shutil
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path
from typing import Final, Literal

from sqlalchemy import Engine
from sqlalchemy.pool import QueuePool

from fhirgallop import assets
from fhirgallop.errors import SettingsError
from fhirgallop.intake.detect import open_records
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping.reading import load_map
from fhirgallop.pipeline import process
from fhirgallop.service.audit import Auditor
from fhirgallop.service.metrics import Reading
from fhirgallop.settings import Settings
from fhirgallop.storage.engine import other_form, version_of
from fhirgallop.storage.outbox import Outbox
from fhirgallop.storage.submissions import StorageError
from fhirgallop.storage.tables import SCHEMA_VERSION

_MB: Final = 1024 * 1024


@dataclass(frozen=True, slots=True)
class Part:
    """One part of the service.

    `warning` wants a person and stops nothing; with `failed` the service cannot do its work.
    """

    name: str
    state: Literal["well", "warning", "failed"]
    reason: str = ""


@dataclass(slots=True)
class Readiness:
    """Looks at the parts whenever it is asked.

    Attributes:
        engine: of the database.
        settings: of the service.
        clock: now.
        auditor: who counts audit events that could not be kept.
        draining: set when the service was told to end.
    """

    engine: Engine
    settings: Settings
    clock: Callable[[], datetime]
    auditor: Auditor
    draining: bool = False
    _outbox: Outbox = field(init=False)
    _tried: bool = field(init=False, default=False)

    def __post_init__(self) -> None:
        self._outbox = Outbox(self.engine)

    def parts(self) -> list[Part]:
        """Every part; reads the database and the file system."""
        return [self._process(), self._database(), self._definitions(), self._deliveries(), self._disk()]

    def _process(self) -> Part:
        if self.draining:
            return Part("process", "failed", "The service was told to end and takes no new work.")
        return Part("process", "well")

    def _database(self) -> Part:
        try:
            found = version_of(self.engine)
        except SettingsError:
            return Part("database", "failed", "The database does not answer.")
        if found != SCHEMA_VERSION:
            return Part("database", "failed", other_form(found or 0))
        return Part("database", "well")

    def try_out(self) -> None:
        """Codes and judges an invented examination, and keeps nothing of it.

        What is compiled then is ready for the first patient, and a broken installation shows before one.
        """
        template = load_map(assets.path("examples", "informatician", "fernwood-heart-form.yaml"))
        text = assets.path("examples", "ehr", "fernwood-exam.json").read_bytes()
        (record,) = open_records(text, content_type="application/json")
        if isinstance(record, LocalRecord):
            settings = self.settings
            result = process(
                record, template, recorded=self.clock(), edition=settings.edition, snomed=settings.snomed
            )
            self._tried = result.ok

    def _definitions(self) -> Part:
        if not self._tried:
            text = "The trial examination could not be coded and judged; install the program anew."
            return Part("definitions", "failed", text)
        return Part("definitions", "well")

    def _deliveries(self) -> Part:
        try:
            tally = self._outbox.tally()
        except StorageError:
            return Part("deliveries", "failed", "The database does not answer.")
        now = int(self.clock().timestamp() * 1000)
        if tally.counts["failed"]:
            text = "Deliveries have failed for good and wait for a person: fhirgallop deliveries list."
            return Part("deliveries", "warning", text)
        if tally.open_until > now:
            return Part("deliveries", "warning", "The record system fails; it is asked again after a rest.")
        if tally.oldest is not None and now - tally.oldest > self.settings.stuck_minutes * 60_000:
            return Part(
                "deliveries", "warning", "The oldest delivery waits longer than the settings find right."
            )
        return Part("deliveries", "well")

    def _disk(self) -> Part:
        """Room on the disk of an embedded database; a server's own disk is not seen from here."""
        if self.engine.url.get_backend_name() != "sqlite":
            return Part("disk", "well")
        free = _free(self.engine)
        if free is None or free < self.settings.free_disk * _MB:
            return Part("disk", "failed", "There is too little room for the database; see the settings.")
        return Part("disk", "well")

    def readings(self) -> Iterator[Reading]:
        """The same and more as figures, for whoever watches."""
        states = {part.name: float(part.state != "failed") for part in self.parts()}
        yield Reading("ready", "Whether a part can do its work.", states, "part")
        yield Reading("audit_failures", "Audit events that could not be kept.", {"": self.auditor.failures})
        yield from _pool(self.engine)
        free = _free(self.engine)
        if free is not None:
            yield Reading("disk_free_bytes", "Room on the disk of the embedded database.", {"": free})
        try:
            tally = self._outbox.tally()
        except StorageError:
            return
        now = self.clock().timestamp() * 1000
        age = max(0.0, (now - tally.oldest) / 1000) if tally.oldest is not None else 0.0
        counts = {str(state): float(number) for state, number in tally.counts.items()}
        yield Reading("deliveries", "Deliveries by state.", counts, "state")
        yield Reading("delivery_age_seconds", "Age of the oldest delivery that has not arrived.", {"": age})
        yield Reading("delivery_failures_in_row", "Deliveries failed in a row.", {"": tally.failures})
        yield Reading("delivery_resting", "1 while nothing is sent.", {"": float(tally.open_until > now)})


def _pool(engine: Engine) -> Iterator[Reading]:
    pool = engine.pool
    if isinstance(pool, QueuePool):
        counts = {"in use": float(pool.checkedout()), "idle": float(pool.checkedin())}
        yield Reading("database_connections", "Connections to the database.", counts, "state")


def _free(engine: Engine) -> float | None:
    if engine.url.get_backend_name() != "sqlite" or not engine.url.database:
        return None
    try:
        return float(shutil.disk_usage(Path(engine.url.database).resolve().parent).free)
    except OSError:
        return None
