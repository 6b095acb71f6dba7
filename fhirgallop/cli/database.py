"""`fhirgallop database ...`: carries it forward, saves and restores it, deletes what need not be kept."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from itertools import count
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, Final

import typer

from fhirgallop.cli.shared import Exit, complain, people, whole_file
from fhirgallop.errors import SettingsError

if TYPE_CHECKING:
    from sqlalchemy import Connection, Engine

    from fhirgallop.storage.backup import Progress
    from fhirgallop.storage.migrations.stored import Keep, Stored

_SAID_EVERY: Final = 1000

app = typer.Typer(
    help="The database: upgrade, backup, restore, prune, and the deletion of one patient's data.",
    no_args_is_help=True,
)
Database = Annotated[
    str | None, typer.Option("--database", help="Its address; FHIRGALLOP_DATABASE where it is left out.")
]


@app.command("status")
def status(database: Database = None) -> None:
    """Print which form the tables have, and how many rows.

    Exit codes: 0 all well; 3 the database is of another version, or a setting has faults; 4 it failed.
    """
    from fhirgallop.storage import backup  # noqa: PLC0415 - heavy; --help stays quick
    from fhirgallop.storage.engine import version_of  # noqa: PLC0415

    with opened(database) as engine:
        typer.echo(f"tables of version {version_of(engine)}, {engine.dialect.name}")
        _print(backup.count(engine))


@app.command("upgrade")
def upgrade(database: Database = None) -> None:
    """Give a database of an earlier version today's tables, with all it holds; whole or not at all.

    Stop the service, and copy the database before.

    Exit codes: 0 it has today's tables; 3 that is not possible, and it is as it was; 4 it failed.
    """
    from fhirgallop.storage import upgrade as carrying  # noqa: PLC0415
    from fhirgallop.storage.retention import clear_away  # noqa: PLC0415
    from fhirgallop.storage.tables import SCHEMA_VERSION  # noqa: PLC0415

    with opened(database, today=False) as engine:
        found = carrying.upgrade(engine, _counted(_keep_resources))
        if found == SCHEMA_VERSION:
            typer.echo(f"the tables are of version {found} already")
            return
        clear_away(engine)
    typer.echo(f"carried forward from version {found} to {SCHEMA_VERSION}")


def _counted(keep: Keep) -> Keep:
    """Says now and then how far it is."""
    done = count(1)

    def counting(connection: Connection, stored: Stored) -> None:
        keep(connection, stored)
        if (number := next(done)) % _SAID_EVERY == 0:
            complain(f"{number:,} examinations")

    return counting


def _keep_resources(connection: Connection, stored: Stored) -> None:
    """The coded resources of an examination that was kept before resources were."""
    from datetime import datetime  # noqa: PLC0415

    from fhirgallop.service.fhir.coded import versions_of  # noqa: PLC0415
    from fhirgallop.storage.resources import add_versions  # noqa: PLC0415

    at = int(datetime.fromisoformat(stored.received).timestamp() * 1000)
    versions = versions_of(stored.bundle, stored.edition)
    add_versions(connection, versions, at=at, submission=stored.row)


@app.command("backup")
def backup_(
    file: Annotated[Path, typer.Argument(help="File to write; it appears when it is whole.")],
    database: Database = None,
) -> None:
    """Write all that the database holds at this moment to one file; the service may go on.

    The file holds patients' data: keep it as you keep the database.

    Exit codes: 0 it is written; 3 the database is of another version; 4 the database or the file failed.
    """
    from datetime import UTC, datetime  # noqa: PLC0415

    from fhirgallop.observations.bundle import instant  # noqa: PLC0415
    from fhirgallop.storage import backup  # noqa: PLC0415

    made = instant(datetime.now(UTC))
    with (
        opened(database) as engine,
        whole_file(file) as out,
        _shown("saving", backup.count(engine)) as progress,
    ):
        contents = backup.write_backup(engine, out, made=made, progress=progress)
    typer.echo(f"{file}: {sum(contents.rows.values()):,} rows")


@app.command("restore")
def restore(
    file: Annotated[Path, typer.Argument(help="A file of `database backup`.")], database: Database = None
) -> None:
    """Fill a new database, of either kind, from a backup; whole or not at all.

    Exit codes: 0 it is filled; 3 a setting has faults; 4 the backup cannot be used, the database is not
    empty, or it failed.
    """
    from fhirgallop.storage import backup  # noqa: PLC0415

    typer.echo(f"{file}: checking it", err=True)
    contents = backup.check_backup(file)
    with opened(database, new=True) as engine, _shown("restoring", contents.rows) as progress:
        backup.read_backup(engine, file, progress=progress)
    typer.echo(f"{sum(contents.rows.values()):,} rows, as they were at {contents.made}")


@app.command("prune")
def prune(database: Database = None) -> None:
    """Delete what was kept long enough (FHIRGALLOP_KEEP_...), as the service does once an hour.

    Exit codes: 0 done; 3 a setting has faults; 4 the database failed.
    """
    from datetime import UTC, datetime  # noqa: PLC0415

    from fhirgallop import settings  # noqa: PLC0415
    from fhirgallop.service.housekeeping import keeping  # noqa: PLC0415
    from fhirgallop.storage import retention  # noqa: PLC0415

    how_long = keeping(settings.load(database=database))
    with opened(database) as engine:
        _print(retention.prune(engine, how_long, datetime.now(UTC)))


@app.command("forget")
def forget(
    patient: Annotated[
        list[str] | None,
        typer.Option(
            metavar="SYSTEM|VALUE",
            help="An identifier of the patient; may be given several times. |ID means resources "
            "that were put here with a bare reference Patient/ID.",
        ),
    ] = None,
    chart_id: Annotated[str, typer.Option(help="The patient's id in the record system, for cards.")] = "",
    server: Annotated[str, typer.Option(help="FHIR address of the record system that has that id.")] = "",
    yes: Annotated[bool, typer.Option("--yes", help="Do not ask.")] = False,
    database: Database = None,
) -> None:
    """Delete all that is kept of one patient, also what still waits to be delivered.

    What was delivered already stays in the record system. The audit trail stays, and keeps that this was
    done; it names patients by digest only. Backups that were made before still hold the data.

    Exit codes: 0 deleted; 1 not confirmed, or traces may be left; 2 the call was wrong; 3 a setting has
    faults; 4 the database failed, and nothing was deleted.
    """
    from fhirgallop.storage import retention  # noqa: PLC0415

    digests = digests_of(patient or [], chart_id, server)
    with opened(database) as engine:
        if not yes and not typer.confirm(f"Delete all of this patient's data from {engine.url.database}?"):
            raise typer.Exit(Exit.REFUSED)
        _print(retention.forget(engine, digests, _audited(engine, digests[: len(patient or []) + 1])))
        clean = retention.clear_away(engine)
        if waiting := retention.unfinished_batches(engine):
            complain(
                f"batches that are not finished, and may name the patient: {waiting}; run this again later"
            )
    if not clean:
        complain("somebody was reading meanwhile; run this again for the last traces in the files")
    if waiting or not clean:
        raise typer.Exit(Exit.REFUSED)


def digests_of(patients: list[str], chart_id: str, server: str) -> list[str]:
    """The digests that one patient stands under, by identifiers and by the id in the record system."""
    from fhirgallop.cards.card import digest  # noqa: PLC0415
    from fhirgallop.storage.keys import patient_key  # noqa: PLC0415

    if not patients and not chart_id:
        raise typer.BadParameter("say whose: --patient SYSTEM|VALUE, --chart-id with --server, or both")
    if bool(chart_id) != bool(server):
        raise typer.BadParameter("--chart-id and --server go together")
    found = []
    for text in patients:
        system, bar, value = text.partition("|")
        if not bar or not value:
            raise typer.BadParameter("give system and value with | between", param_hint="--patient")
        found.append(patient_key(system, value))
    if chart_id:
        # the address as it was given, and with and without the last stroke, as calls may have had it
        bare = server.rstrip("/")
        found += [digest("patient", one, chart_id) for one in (server, bare, bare + "/")]
        found.append(patient_key("", f"{bare}/Patient/{chart_id}"))
    return found


def _audited(engine: Engine, digests: list[str]) -> Any:
    """The audit record of the deletion, by the account that runs this."""
    import getpass  # noqa: PLC0415
    import uuid  # noqa: PLC0415
    from datetime import UTC, datetime  # noqa: PLC0415

    from fhirgallop.service.audit import Auditor  # noqa: PLC0415
    from fhirgallop.service.audit_event import Deed  # noqa: PLC0415
    from fhirgallop.storage.audit import AuditTrail  # noqa: PLC0415

    auditor = Auditor(AuditTrail(engine), lambda: datetime.now(UTC), lambda: str(uuid.uuid4()))
    deed = Deed("D", "delete", tuple(dict.fromkeys(digests)), ("all data of the patient",))
    return auditor.kept_by_worker(deed, getpass.getuser())


@contextmanager
def opened(database: str | None, *, today: bool = True, new: bool = False) -> Iterator[Engine]:
    """The database of the settings, with `today`'s tables, or a `new` one; what it cannot do is told."""
    from fhirgallop import settings  # noqa: PLC0415
    from fhirgallop.storage.engine import connect, other_form, version_of  # noqa: PLC0415
    from fhirgallop.storage.submissions import StorageError  # noqa: PLC0415
    from fhirgallop.storage.tables import SCHEMA_VERSION  # noqa: PLC0415

    engine = connect(settings.load(database=database).database)
    try:
        if not new:
            # SQLite would make a file of a mistyped name
            there = engine.dialect.name != "sqlite" or Path(engine.url.database or "").is_file()
            found = version_of(engine) if there else None
            if found is None:
                raise SettingsError(
                    f"there is nothing in {engine.url.database}; check the database's address"
                )
            if today and found != SCHEMA_VERSION:
                raise SettingsError(other_form(found))
        yield engine
    except StorageError as error:
        complain(f"the database failed ({error}); see its own log, and try again")
        raise typer.Exit(Exit.UNUSABLE) from None
    finally:
        engine.dispose()


@contextmanager
def _shown(what: str, rows: Mapping[str, int]) -> Iterator[Progress]:
    from rich.progress import MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn  # noqa: PLC0415

    columns = (TextColumn(what), MofNCompleteColumn(), TextColumn("rows"), TimeElapsedColumn())
    with Progress(*columns, console=people(), transient=True) as bar:
        task = bar.add_task(what, total=sum(rows.values()))
        done = dict.fromkeys(rows, 0)

        def tell(table: str, number: int) -> None:
            done[table] = number
            bar.update(task, completed=sum(done.values()))

        yield tell


def _print(rows: Mapping[str, int]) -> None:
    for name, number in rows.items():
        typer.echo(f"{number:>10,}  {name}")
    typer.echo(f"{sum(rows.values()):>10,}  in all")
