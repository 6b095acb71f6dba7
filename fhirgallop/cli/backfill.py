"""`fhirgallop backfill`: years of records through a map, on all processors of a machine."""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from fhirgallop.cli.shared import EditionName, Exit, complain, moment, people

if TYPE_CHECKING:
    from rich.console import Console

    from fhirgallop.bulk.run import Progress


def command(  # noqa: PLR0913, PLR0917 - one argument an option
    inputs: Annotated[
        list[Path],
        typer.Argument(
            help="Record files (CSV, NDJSON, HL7, Excel, JSON; .gz too), or folders.", metavar="INPUT"
        ),
    ],
    map_: Annotated[Path, typer.Option("--map", help="The template map (YAML).")],
    out: Annotated[
        Path, typer.Option(help="Folder for everything: new, or of the same run, to go on with it.")
    ],
    workers: Annotated[int, typer.Option(min=1, help="Processes.")] = os.cpu_count() or 1,
    edition: Annotated[EditionName, typer.Option(help="FHIR edition to write.")] = EditionName.R4,
    snomed: Annotated[bool, typer.Option(help="Write SNOMED CT codings.")] = True,
    bundles: Annotated[
        bool, typer.Option("--bundles", help="Write transaction Bundles, in place of files by resource type.")
    ] = False,
    packed: Annotated[bool, typer.Option("--gzip", help="Pack what is written.")] = False,
    findings: Annotated[
        bool, typer.Option("--findings", help="Also write Parquet, a row a finding (extra [bulk]).")
    ] = False,
    alerts: Annotated[
        int,
        typer.Option(
            min=0, help="Hold one examination in so many against the rules, for the report; 1 all, 0 none."
        ),
    ] = 10,
    wordings: Annotated[
        bool,
        typer.Option(
            "--show-wordings",
            help="Put wordings that the map does not know into the report: they are patients' data.",
        ),
    ] = False,
    part: Annotated[int, typer.Option(min=1, help="Records a part; a killed run loses parts begun.")] = 1000,
    base_url: Annotated[
        str, typer.Option(help="Address under which the folder will be served, for the manifest.")
    ] = "",
    recorded: Annotated[
        str | None,
        typer.Option(help="Moment of conversion (ISO 8601 with zone), for output that can be repeated."),
    ] = None,
) -> None:
    """Code years of records. Killed at any moment, it goes on where it was when it is called again.

    Exit codes: 0 every record was coded; 1 some were refused (see errors.csv; the others are written); 2 the
    call was wrong; 3 the map has faults; 4 a file or the folder could not be used.
    """
    from fhirgallop.bulk.finish import finish  # noqa: PLC0415 - heavy; --help stays quick
    from fhirgallop.bulk.run import recorded_before, run  # noqa: PLC0415
    from fhirgallop.bulk.wish import Wish, sources  # noqa: PLC0415

    now = (recorded_before(out) if recorded is None else None) or moment(recorded, "--recorded")
    wish = Wish(
        map_text=map_.read_bytes(),
        map_name=map_.name,
        recorded=now,
        edition=edition.value,
        snomed=snomed,
        bundles=bundles,
        packed=packed,
        findings=findings,
        review_each=alerts,
        wordings=wordings,
        each=part,
    )
    files = sources(inputs)
    console = people()
    with _shown(console, sum(source.size for source in files)) as progress:
        run(wish, files, out, workers=workers, progress=progress)
    tally = finish(wish, files, out, base=base_url and base_url.rstrip("/") + "/")
    became = tally.became
    complain(
        f"{tally.records():,} records: {became['coded',]:,} coded, {became['refused',]:,} refused, "
        f"{became['unreadable',]:,} unreadable; see {out}"
    )
    raise typer.Exit(Exit.WELL if became["coded",] == tally.records() else Exit.REFUSED)


@contextmanager
def _shown(console: Console, size: int) -> Iterator[Progress | None]:
    """Shows how far it is, how fast, and how long it will take, while a person watches."""
    if not console.is_terminal:
        yield None
        return
    from rich.progress import BarColumn, Progress, TaskProgressColumn, TextColumn, TimeRemainingColumn  # noqa: PLC0415

    columns = (
        TextColumn("{task.fields[exams]:,} examinations"), BarColumn(), TaskProgressColumn(),
        TextColumn("{task.fields[rate]:,.0f}/s"), TimeRemainingColumn(),
    )  # fmt: skip
    with Progress(*columns, console=console, transient=True, speed_estimate_period=300) as shown:
        task = shown.add_task("coding", total=size, exams=0, rate=0.0)

        def progress(exams: int, done: int) -> None:
            seconds = shown.tasks[0].elapsed or 1.0
            shown.update(task, completed=done, exams=exams, rate=exams / seconds)

        yield progress
