"""`fhirgallop map ...`: checks a template map, compares two, suggests; prints the format's JSON Schema."""

from __future__ import annotations

from collections import Counter
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Final

import typer

from fhirgallop.cli.shared import Exit

if TYPE_CHECKING:
    from fhirgallop.mapping.compare import Comparison
    from fhirgallop.mapping.coverage import Coverage
    from fhirgallop.mapping.template_map import TemplateMap
    from fhirgallop.outcome import Issue

_SHOWN: Final = 50

app = typer.Typer(
    help="Template maps: check one, compare two, suggest lines, or print the schema.", no_args_is_help=True
)


@app.command("check")
def check(
    map_: Annotated[Path, typer.Argument(metavar="MAP", help="The template map (YAML).")],
    records: Annotated[
        list[Path] | None, typer.Option("--with", help="Records to try it on; may be given several times.")
    ] = None,
) -> None:
    """Tell every fault of a map with its line and cure; with records, also what it leaves open in them.

    Exit codes: 0 nothing is wrong; 1 the records hold fields or values the map does not know, or that are
    refused; 3 the map has faults.
    """
    from fhirgallop import api  # noqa: PLC0415 - heavy; --help stays quick

    template = api.read_map(map_)
    typer.echo(
        f"{map_}: map {template.name}, version {template.version}: no fault, {len(template.lines)} lines"
    )
    if records:
        _try(template, records)


def _try(template: TemplateMap, paths: list[Path]) -> None:
    from fhirgallop.exam import catalogue, checks  # noqa: PLC0415
    from fhirgallop.intake.detect import open_records  # noqa: PLC0415
    from fhirgallop.intake.record import LocalRecord  # noqa: PLC0415
    from fhirgallop.mapping.apply import apply  # noqa: PLC0415
    from fhirgallop.mapping.coverage import Coverage  # noqa: PLC0415

    known = catalogue.load()
    coverage = Coverage(template, known)
    refusals: Counter[tuple[str, str]] = Counter()
    first: dict[tuple[str, str], Issue] = {}
    refused = unreadable = 0
    for path in paths:
        for read in open_records(path, name=str(path)):
            if not isinstance(read, LocalRecord):
                unreadable += 1
                for issue in read.issues:
                    typer.echo(str(issue))
                continue
            mapped = apply(read, template, known)
            coverage.add(read, mapped)
            found = [*mapped.issues, *(checks.check(mapped.exam, known) if mapped.exam else ())]
            errors = [issue for issue in found if issue.is_error]
            refused += bool(errors)
            for issue in errors:
                kind = (issue.field, issue.rule)
                refusals[kind] += 1
                first.setdefault(kind, issue)
    _print(coverage, refused, unreadable)
    _print_refusals(refusals, first)
    still_open = coverage.unknown() or any(
        count.use == "unread" and count.filled for count in coverage.fields()
    )
    raise typer.Exit(Exit.REFUSED if refused or unreadable or still_open else Exit.WELL)


def _print(coverage: Coverage, refused: int, unreadable: int) -> None:
    from rich.console import Console  # noqa: PLC0415
    from rich.table import Table  # noqa: PLC0415

    console = Console(highlight=False)
    console.print(
        f"{coverage.records:,} records: {refused:,} would be refused; {unreadable:,} could not be read"
    )
    fields = Table("field", "the map", "filled", "blank", box=None)
    for count in coverage.fields():
        fields.add_row(count.name, count.use, f"{count.filled:,}", f"{count.blank:,}")
    console.print(fields)
    if coverage.unknown():
        values = Table("field", "value the map does not know", "times", box=None)
        for value, times in coverage.unknown():
            values.add_row(value.field, value.value, f"{times:,}")
        console.print(values)
    for issue in coverage.issues():
        console.print(str(issue), markup=False, soft_wrap=True)


def _print_refusals(refusals: Counter[tuple[str, str]], first: dict[tuple[str, str], Issue]) -> None:
    """Why records would be refused: the first issue of each kind, with the number of its like."""
    for kind, times in refusals.most_common(_SHOWN):
        typer.echo(f"{first[kind]} (met {times:,} times)")
    if len(refusals) > _SHOWN:
        typer.echo(f"... and {len(refusals) - _SHOWN:,} kinds more; fhirgallop code --issues FILE tells all")


@app.command("compare")
def compare(
    old: Annotated[Path, typer.Argument(help="The map as it is.")],
    new: Annotated[Path, typer.Argument(help="The map as it would be.")],
    records: Annotated[list[Path], typer.Option("--with", help="Records to read by both; several times.")],
) -> None:
    """Tell what a changed map would change in these records, before it is used.

    Exit codes: 0 nothing changes; 1 something does; 3 a map has faults.
    """
    from fhirgallop import api  # noqa: PLC0415
    from fhirgallop.exam import catalogue  # noqa: PLC0415
    from fhirgallop.intake.record import LocalRecord  # noqa: PLC0415
    from fhirgallop.mapping.compare import Comparison  # noqa: PLC0415

    comparison = Comparison(api.read_map(old), api.read_map(new), catalogue.load())
    for path in records:
        for read in api.read_records(path):
            if isinstance(read, LocalRecord):
                comparison.add(read)
    _print_comparison(comparison)
    changed = comparison.differences() or comparison.newly_refused or comparison.other_identity
    raise typer.Exit(Exit.REFUSED if changed else Exit.WELL)


def _print_comparison(comparison: Comparison) -> None:
    from rich.console import Console  # noqa: PLC0415
    from rich.table import Table  # noqa: PLC0415

    console = Console(highlight=False)
    console.print(
        f"{comparison.records:,} records: {comparison.touched:,} come out otherwise; "
        f"{comparison.newly_refused:,} would be refused that are not now, {comparison.newly_coded:,} no more;"
        f" {comparison.other_identity:,} would become another examination"
    )
    table = Table("finding", "change", "entries", "first records", "from the fields", box=None)
    for one in comparison.differences():
        first = ", ".join(str(at + 1) for at in one.examples)
        table.add_row(one.finding, one.change, f"{one.count:,}", first, ", ".join(sorted(one.fields)))
    console.print(table)


@app.command("suggest")
def suggest(
    records: Annotated[list[Path], typer.Argument(help="Records of the form, of any kind that is read.")],
) -> None:
    """List the fields of a form's records, each with what it may mean; nothing is decided."""
    from rich.console import Console  # noqa: PLC0415
    from rich.table import Table  # noqa: PLC0415

    from fhirgallop import api  # noqa: PLC0415
    from fhirgallop.intake.record import LocalRecord  # noqa: PLC0415
    from fhirgallop.mapping.suggest import MOST_VALUES, suggest  # noqa: PLC0415
    from fhirgallop.mapping.wordings import wordings  # noqa: PLC0415

    seen: dict[str, dict[str, None]] = {}
    for path in records:
        for read in api.read_records(path):
            for name, field in read.fields.items() if isinstance(read, LocalRecord) else ():
                held = seen.setdefault(name, {})
                if len(held) < MOST_VALUES:
                    held |= dict.fromkeys(wordings(value)[-1] for value in field.values)
    table = Table("field", "may be", "because", box=None)
    for name, values in seen.items():
        section, _, short = name.rpartition(".")
        named = name
        for one in suggest(short, values=values, section=section):
            table.add_row(named, str(one.target), "; ".join(one.reasons))
            named = ""
        if named:
            table.add_row(named, "-", "no wording is like it")
    Console(highlight=False).print(table)


@app.command("schema")
def schema() -> None:
    """Print the JSON Schema of the map format, for editors that complete and check as you type."""
    from fhirgallop.codes import fhirjson  # noqa: PLC0415
    from fhirgallop.mapping.schema import schema as described  # noqa: PLC0415

    typer.echo(fhirjson.pretty(described()).decode())
