"""`fhirgallop audit`: who touched whose data."""

from __future__ import annotations

import sys
from contextlib import ExitStack
from pathlib import Path
from typing import Annotated

import typer

from fhirgallop.cli.database import Database, digests_of, opened
from fhirgallop.cli.shared import complain, moment, whole_file

app = typer.Typer(help="The audit trail: who touched whose data.", no_args_is_help=True)


@app.callback()
def _group() -> None:
    """See the help text of the group."""


@app.command("export")
def export(
    since: Annotated[
        str | None, typer.Option(help="From this instant on (ISO 8601 with zone); else from the beginning.")
    ] = None,
    until: Annotated[str | None, typer.Option(help="Before this instant.")] = None,
    patient: Annotated[
        list[str] | None,
        typer.Option(
            metavar="SYSTEM|VALUE", help="Of one patient alone, by an identifier; may be given several times."
        ),
    ] = None,
    chart_id: Annotated[str, typer.Option(help="The patient's id in the record system, for cards.")] = "",
    server: Annotated[str, typer.Option(help="FHIR address of the record system that has that id.")] = "",
    out: Annotated[Path | None, typer.Option(help="File to write; else standard output.")] = None,
    database: Database = None,
) -> None:
    """Write the trail as FHIR R4 AuditEvents, one a line (NDJSON), oldest first.

    Patients stand in it as digests; --patient and --chart-id find the events of one.

    Exit codes: 0 written; 2 the call was wrong; 3 a setting has faults; 4 the database or the file could not
    be used.
    """
    from fhirgallop.storage.audit import AuditTrail  # noqa: PLC0415 - heavy; --help stays quick

    whose = digests_of(patient or [], chart_id, server) if patient or chart_id else []
    start = int(moment(since, "--since").timestamp() * 1000) if since else 0
    end = int(moment(until, "--until").timestamp() * 1000) if until else None
    count = 0
    with opened(database) as engine, ExitStack() as stack:
        sink = stack.enter_context(whole_file(out, may_be_empty=True)) if out else sys.stdout.buffer
        for row in AuditTrail(engine).read(since=start, until=end, patients=whose):
            sink.write(row.event + b"\n")
            count += 1
        sink.flush()
    complain(f"{count:,} events")
