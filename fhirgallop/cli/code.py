"""`fhirgallop code`: records through a template map to Bundles."""

from __future__ import annotations

import sys
from collections import Counter
from collections.abc import Iterator
from contextlib import ExitStack
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import IO, TYPE_CHECKING, Annotated, Any, Final

import typer

from fhirgallop.cli.shared import EditionName, Exit, complain, moment, people, resource, whole_file

if TYPE_CHECKING:
    from rich.console import Console

    from fhirgallop.intake.reading import Read
    from fhirgallop.outcome import Issue

_SHOWN: Final = 100


def command(  # noqa: PLR0913, PLR0917 - one argument an option
    records: Annotated[
        list[Path], typer.Argument(help="Record files (JSON, NDJSON, CSV, Excel, HL7), or folders.")
    ],
    map_: Annotated[Path, typer.Option("--map", help="The template map (YAML).")],
    edition: Annotated[EditionName, typer.Option(help="FHIR edition to write.")] = EditionName.R4,
    out: Annotated[
        Path | None,
        typer.Option(help="File for the Bundle (JSON), or Bundles (NDJSON); else standard output."),
    ] = None,
    issues: Annotated[
        Path | None, typer.Option(help="File for all issues, an OperationOutcome a line.")
    ] = None,
    recorded: Annotated[
        str | None,
        typer.Option(help="Moment of conversion (ISO 8601 with zone), for output that can be repeated."),
    ] = None,
    amends: Annotated[
        Path | None, typer.Option(help="The Bundle that this one examination gave before it was changed.")
    ] = None,
    snomed: Annotated[bool, typer.Option(help="Write SNOMED CT codings.")] = True,
    form: Annotated[
        Path | None,
        typer.Option("--form", help="The Questionnaire (JSON) that QuestionnaireResponses are judged by."),
    ] = None,
) -> None:
    """Code examinations. One gives a Bundle as JSON, several give NDJSON, a Bundle a line.

    Exit codes: 0 every record was coded; 1 some were refused (the others are written); 2 the call was wrong;
    3 the map has faults; 4 a file could not be used.
    """
    from fhirgallop import api  # noqa: PLC0415 - heavy; --help stays quick
    from fhirgallop.codes import fhirjson  # noqa: PLC0415
    from fhirgallop.intake.record import LocalRecord  # noqa: PLC0415
    from fhirgallop.outcome import operation_outcome  # noqa: PLC0415

    template = api.read_map(map_)
    now = moment(recorded, "--recorded")
    earlier = resource(amends, "Bundle", "--amends") if amends else None
    questionnaire = resource(form, "Questionnaire", "--form") if form else None
    tally = Tally()
    console = people()
    with ExitStack() as stack:
        sink = Sink(stack.enter_context(whole_file(out)) if out else sys.stdout.buffer, out)
        trail = stack.enter_context(whole_file(issues, may_be_empty=True)) if issues else None
        for read in _with_progress(_all(records, questionnaire), console):
            if isinstance(read, LocalRecord):
                result = api.process(
                    read, template, edition.value, recorded=now, snomed=snomed, earlier=earlier
                )
                tally.add("coded" if result.ok else "refused", [_placed(i, read) for i in result.issues])
                if result.bundle is not None:
                    sink.add(result.bundle)
            else:
                tally.add("unreadable", list(read.issues))
            if trail and tally.newest:
                trail.write(fhirjson.write(operation_outcome(tally.newest)) + b"\n")
            for issue in tally.to_say():
                complain(str(issue))
        if earlier is not None and tally.count.total() != 1:
            complain("--amends goes with exactly one examination")
            raise typer.Exit(Exit.USAGE)
        sink.close()
    if not tally.count:
        complain("there is no examination in what was given; name record files, or folders that hold some")
    tally.print(console)
    raise typer.Exit(Exit.WELL if tally.all_coded else Exit.REFUSED)


def _all(paths: list[Path], questionnaire: dict[str, Any] | None) -> Iterator[Read]:
    from fhirgallop.intake.detect import kind_of, open_records  # noqa: PLC0415

    for path in paths:
        found = [path]
        if path.is_dir():
            found = sorted(p for p in path.rglob("*") if p.is_file() and kind_of(name=p.name))
        for file in found:
            yield from open_records(file, name=str(file), questionnaire=questionnaire)


def _with_progress(reads: Iterator[Read], console: Console) -> Iterator[Read]:
    """Shows count and rate while a person watches."""
    if not console.is_terminal:
        yield from reads
        return
    from rich.progress import Progress, TextColumn, TimeElapsedColumn  # noqa: PLC0415

    columns = (TextColumn("{task.completed:,.0f} examinations"), TimeElapsedColumn())
    with Progress(*columns, console=console, transient=True) as progress:
        task = progress.add_task("coding", total=None)
        for read in reads:
            yield read
            progress.advance(task)


def _placed(issue: Issue, read: Any) -> Issue:
    """The issue with the file and line of its record, where it names none."""
    return replace(issue, source=issue.source or read.source, line=issue.line or read.line)


class Sink:
    """One Bundle as readable JSON, several (or a file named .ndjson) as NDJSON."""

    def __init__(self, file: IO[bytes], path: Path | None) -> None:
        self._file = file
        self._lines = path is not None and path.suffix == ".ndjson"
        self._first: dict[str, Any] | None = None

    def add(self, bundle: dict[str, Any]) -> None:
        """Takes one Bundle; the first waits until it is known whether it is the only one."""
        if self._first is None and not self._lines:
            self._first = bundle
            return
        if not self._lines:
            self._lines = True
            self._line(self._first)
        self._line(bundle)

    def close(self) -> None:
        """Writes a single Bundle that still waits."""
        from fhirgallop.codes import fhirjson  # noqa: PLC0415

        if self._first is not None and not self._lines:
            self._file.write(fhirjson.pretty(self._first) + b"\n")
        self._file.flush()

    def _line(self, bundle: dict[str, Any] | None) -> None:
        from fhirgallop.codes import fhirjson  # noqa: PLC0415

        self._file.write(fhirjson.write(bundle) + b"\n")


@dataclass
class Tally:
    """Counts what became of the records, and of what kind their issues were."""

    count: Counter[str] = field(default_factory=Counter)
    rules: Counter[tuple[str, str, str]] = field(default_factory=Counter)
    newest: list[Issue] = field(default_factory=list)
    _said: int = 0

    def add(self, became: str, issues: list[Issue]) -> None:
        """Counts one record."""
        self.count[became] += 1
        self.newest = issues
        for issue in issues:
            self.rules[issue.severity, issue.rule, issue.field] += 1

    def to_say(self) -> Iterator[Issue]:
        """The newest errors, and whatever is new in kind, as long as a person can still read it."""
        for issue in self.newest:
            first = self.rules[issue.severity, issue.rule, issue.field] == 1
            if issue.is_error or first:
                self._said += 1
                if self._said <= _SHOWN:
                    yield issue
                if self._said == _SHOWN:
                    complain("... more is counted below and written with --issues FILE")

    @property
    def all_coded(self) -> bool:
        """True when every record was coded, and there was one."""
        return self.count.total() == self.count["coded"] > 0

    def print(self, console: Console) -> None:
        """The summary table."""
        from rich.table import Table  # noqa: PLC0415

        console.print(
            f"{self.count.total():,} examinations: {self.count['coded']:,} coded, {self.count['refused']:,} "
            f"refused, {self.count['unreadable']:,} unreadable"
        )
        if self.rules:
            table = Table("issue", "severity", "field", "times", box=None)
            for (severity, rule, name), times in self.rules.most_common():
                table.add_row(rule, severity, name, f"{times:,}")
            console.print(table)
