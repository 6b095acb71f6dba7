"""`fhirgallop deliveries ...`: what is still to be sent to the record system, and sending it."""

from __future__ import annotations

import signal
import sys
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from enum import StrEnum
from types import FrameType
from typing import TYPE_CHECKING, Annotated, cast

import typer

from fhirgallop.cli.shared import Exit, complain

if TYPE_CHECKING:
    from sqlalchemy import Engine

    from fhirgallop.settings import Settings
    from fhirgallop.storage.outbox import Delivery

app = typer.Typer(
    help="Deliveries to the record system: look at them, send failed ones again, work them off. Settings "
    "come from FHIRGALLOP_... variables, as for `serve`.",
    no_args_is_help=True,
)

Database = Annotated[str | None, typer.Option(help="Database address.")]
Numbers = Annotated[list[int] | None, typer.Argument(metavar="NUMBER...", help="From `deliveries list`.")]


class StateName(StrEnum):
    """States of deliveries, for the command line; `open` is all that has not arrived."""

    OPEN = "open"
    WAITING = "waiting"
    SENDING = "sending"
    FAILED = "failed"
    DELIVERED = "delivered"
    DROPPED = "dropped"


@app.command("list")
def list_(
    state: Annotated[StateName, typer.Option(help="Which ones.")] = StateName.OPEN,
    limit: Annotated[int, typer.Option(min=1, max=100_000, help="How many at most.")] = 100,
    database: Database = None,
) -> None:
    """Show deliveries, the oldest first, one a line; no patient data.

    Exit codes: 0 shown; 1 some have failed and want a person.
    """
    from fhirgallop.storage.outbox import Outbox, State  # noqa: PLC0415 - heavy; --help stays quick

    states: list[State] = ["waiting", "sending", "failed"]
    if state is not StateName.OPEN:
        states = [cast("State", state.value)]
    with _opened(database) as (engine, _):
        box = Outbox(engine)
        for found in box.look(states, limit=limit):
            typer.echo(_line(found))
        tally = box.tally()
    counts = ", ".join(f"{number} {name}" for name, number in tally.counts.items())
    complain(counts)
    if tally.open_until > _now():
        complain(f"the record system rests until {_moment(tally.open_until)} after {tally.failures} failures")
    if tally.counts["failed"]:
        complain("failed ones: cure the reason, then `fhirgallop deliveries retry --all`")
        raise typer.Exit(Exit.REFUSED)


@app.command("show")
def show(
    number: Annotated[int, typer.Argument(help="From `deliveries list`.")],
    answer: Annotated[
        bool, typer.Option("--answer", help="Also what the record system said; it may hold patient data.")
    ] = False,
    database: Database = None,
) -> None:
    """Show one delivery with what became of each entry.

    Exit codes: 0 shown; 1 there is none of that number.
    """
    from fhirgallop.codes import fhirjson  # noqa: PLC0415 - heavy; --help stays quick
    from fhirgallop.storage.outbox import Outbox  # noqa: PLC0415

    with _opened(database) as (engine, _):
        found = Outbox(engine).one(number)
    if found is None:
        complain(f"there is no delivery {number}")
        raise typer.Exit(Exit.REFUSED)
    typer.echo(_line(found))
    typer.echo(f"examination {found.exam}, submission {found.submission}, noted {_moment(found.created)}")
    outcome = fhirjson.read(found.outcome)[0] if found.outcome else {}
    for place, entry in enumerate(outcome.get("entry", ())):
        said = " ".join(filter(None, (entry["status"], entry.get("location"), entry.get("etag"))))
        typer.echo(f"entry[{place}] {said}")
    if answer and "outcome" in outcome:
        typer.echo(fhirjson.pretty(outcome["outcome"]).decode())


@app.command("retry")
def retry(
    numbers: Numbers = None,
    all_: Annotated[bool, typer.Option("--all", help="Every failed one, and end a rest.")] = False,
    database: Database = None,
) -> None:
    """Send failed deliveries again; named ones that wait are sent at once.

    Exit codes: 0 they are under way, or a rest ended; 1 there was none; 2 neither numbers nor --all.
    """
    from fhirgallop.storage.outbox import Outbox  # noqa: PLC0415 - heavy; --help stays quick

    if bool(numbers) == all_:
        raise typer.BadParameter("give numbers, or --all", param_hint="NUMBER...")
    with _opened(database) as (engine, _):
        box = Outbox(engine)
        count = box.again(None if all_ else numbers, _now())
        rested = all_ and box.reopen(_now())
    if rested:
        complain("the record system is asked at once")
    if count or not rested:
        _counted(count, "to be sent again")


@app.command("drop")
def drop(
    numbers: Annotated[list[int], typer.Argument(metavar="NUMBER...", help="From `deliveries list`.")],
    yes: Annotated[bool, typer.Option("--yes", help="Do not ask.")] = False,
    database: Database = None,
) -> None:
    """Give deliveries up: the record system never gets them, later versions of the examination go on.

    Exit codes: 0 given up; 1 there was none that failed or waits.
    """
    from fhirgallop.storage.outbox import Outbox  # noqa: PLC0415 - heavy; --help stays quick

    if not yes:
        typer.confirm("The record system will never get these. Give them up?", abort=True)
    with _opened(database) as (engine, _):
        count = Outbox(engine).drop(numbers)
    _counted(count, "given up")


@app.command("work")
def work(
    threads: Annotated[int, typer.Option(min=1, max=32, help="Deliveries at a time.")] = 1,
    until_empty: Annotated[
        bool, typer.Option("--until-empty", help="End when nothing waits any more.")
    ] = False,
    database: Database = None,
) -> None:
    """Send deliveries in a process of its own, beside or in place of the service's workers, until ended.

    Exit codes: 0 ended when asked to, or nothing waits; 3 the settings name nowhere to deliver to.
    """
    from fhirgallop.delivery.dispatch import open_dispatch  # noqa: PLC0415 - heavy; --help stays quick
    from fhirgallop.errors import SettingsError  # noqa: PLC0415
    from fhirgallop.service.app import now  # noqa: PLC0415
    from fhirgallop.service.audit import Auditor  # noqa: PLC0415
    from fhirgallop.service.delivering import delivery_trail  # noqa: PLC0415
    from fhirgallop.service.logging import start_logging  # noqa: PLC0415
    from fhirgallop.service.operation import new_id  # noqa: PLC0415
    from fhirgallop.storage.audit import AuditTrail  # noqa: PLC0415
    from fhirgallop.storage.outbox import Outbox  # noqa: PLC0415

    with _opened(database) as (engine, chosen):
        start_logging(chosen.log_form, chosen.log_level)
        auditor = Auditor(AuditTrail(engine), now, new_id)
        trail = delivery_trail(auditor, chosen)
        dispatch = open_dispatch(chosen, engine, now, threads=threads, trail=trail)
        if dispatch is None:
            raise SettingsError("FHIRGALLOP_DELIVER_TO: name the record system's FHIR endpoint")
        asked = _asked_to_end()
        dispatch.workers.start()
        box = Outbox(engine)
        while not asked.wait(0.5):
            counts = box.tally().counts if until_empty else None
            if counts and not (counts["waiting"] or counts["sending"]):
                break
        finished = dispatch.stop(chosen.finish_seconds)
    complain(", ".join(f"{count} {kind}" for kind, count in sorted(dispatch.workers.counts().items())))
    if not finished:
        complain("what was being sent is sent again when its lease has run out")


def _asked_to_end() -> threading.Event:
    """Is set by the first signal to end; the second ends at once."""
    asked = threading.Event()

    def end(number: int, _frame: FrameType | None) -> None:
        if asked.is_set():
            sys.exit(128 + number)
        asked.set()

    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, end)
    return asked


@contextmanager
def _opened(database: str | None) -> Iterator[tuple[Engine, Settings]]:
    """The database with the settings; a failure of it as a sentence and an exit code."""
    from fhirgallop import settings  # noqa: PLC0415 - heavy together; --help stays quick
    from fhirgallop.storage.engine import open_database  # noqa: PLC0415
    from fhirgallop.storage.submissions import StorageError  # noqa: PLC0415

    chosen = settings.load(database=database)
    engine = open_database(chosen.database)
    try:
        yield engine, chosen
    except StorageError as error:
        complain(f"the database failed ({error}); nothing was changed")
        raise typer.Exit(Exit.UNUSABLE) from None
    finally:
        engine.dispose()


def _line(found: Delivery) -> str:
    when = f"next try {_moment(found.due)}, " if found.state == "waiting" else ""
    said = f": {found.reason}" if found.reason else ""
    return f"{found.id}\t{found.state}\t{when}{found.attempts} tries{said}"


def _counted(count: int, done: str) -> None:
    complain(f"{count} {done}")
    if not count:
        raise typer.Exit(Exit.REFUSED)


def _moment(milliseconds: int) -> str:
    return datetime.fromtimestamp(milliseconds / 1000, tz=UTC).strftime("%Y-%m-%dT%H:%M:%SZ")


def _now() -> int:
    return round(datetime.now(tz=UTC).timestamp() * 1000)
