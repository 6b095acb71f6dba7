"""``fhirgallop validate``: what is wrong with the resources in files and folders."""

from __future__ import annotations

import sys
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import replace
from enum import StrEnum
from pathlib import Path
from typing import Annotated

import orjson
import typer

from fhirgallop.conformance.registry import registry
from fhirgallop.conformance.validator import validate as judge
from fhirgallop.outcome import Issue, operation_outcome, ordered

MAX_LINE = 64 * 1024 * 1024


class Edition(StrEnum):
    """The FHIR editions."""

    R4 = "R4"
    R4B = "R4B"
    R5 = "R5"


class Format(StrEnum):
    """How issues are written."""

    TEXT = "text"
    OUTCOME = "outcome"


def check(
    files: Sequence[Path], edition: str = "R4", packages: Sequence[Path] = (), profiles: Sequence[str] = ()
) -> Iterator[tuple[str, list[Issue]]]:
    """Name and issues of each resource in JSON files, NDJSON files (a resource a line) and folders of both.

    Raises:
        PackageError: a package is broken.
    """
    known = tuple(packages)
    registry(edition, known)  # a broken package is said before the first file
    for file in _files(files):
        if file.suffix.lower() == ".ndjson":
            yield from _lines(file, edition, known, profiles)
            continue
        try:
            text = file.read_bytes()
        except OSError as error:
            yield str(file), [_unreadable(str(file), error)]
            continue
        yield str(file), [replace(i, source=str(file)) for i in judge(text, edition, profiles, known)]


def command(
    files: Annotated[list[Path], typer.Argument(help="JSON or NDJSON files, or folders of them.")],
    edition: Annotated[Edition, typer.Option(help="FHIR edition.")] = Edition.R4,
    package: Annotated[
        list[Path] | None, typer.Option(help="A FHIR package (.tgz) with further definitions.")
    ] = None,
    profile: Annotated[list[str] | None, typer.Option(help="Canonical of a profile to be met.")] = None,
    output: Annotated[
        Format, typer.Option("--format", help="Text lines, or one OperationOutcome.")
    ] = Format.TEXT,
) -> None:
    """Check FHIR resources by the base specification and their profiles. Exit code 1: an error was found."""
    issues: list[Issue] = []
    count = faulty = 0
    for name, found in check(files, edition.value, package or (), profile or ()):
        count += 1
        faulty += any(issue.is_error for issue in found)
        if output is Format.TEXT:
            for issue in found:
                typer.echo(str(issue))
        else:
            issues.extend(found)
        _progress(count, name)
    if output is Format.OUTCOME:
        typer.echo(orjson.dumps(operation_outcome(ordered(issues)), option=orjson.OPT_INDENT_2).decode())
    resources = "1 resource" if count == 1 else f"{count} resources"
    typer.echo(f"{resources} checked, {faulty} with errors", err=True)
    if faulty:
        raise typer.Exit(1)


def _progress(count: int, name: str) -> None:
    """A line on a terminal now and then; nothing in a pipe."""
    if count % 200 == 0 and sys.stderr.isatty():
        typer.echo(f"\r{count} checked, at {name[-60:]}", err=True, nl=False)


def _files(paths: Iterable[Path]) -> Iterator[Path]:
    for path in paths:
        if path.is_dir():
            yield from sorted(
                f for f in path.rglob("*") if f.suffix.lower() in (".json", ".ndjson") and f.is_file()
            )
        else:
            yield path


def _lines(
    file: Path, edition: str, packages: Sequence[Path], profiles: Sequence[str]
) -> Iterator[tuple[str, list[Issue]]]:
    try:
        with file.open("rb") as stream:
            number = 0
            while line := stream.readline(MAX_LINE):
                number += 1
                if not line.strip():
                    continue
                name = f"{file}:{number}"
                found = judge(line, edition, profiles, packages)
                yield name, [replace(i, source=name) for i in found]
    except OSError as error:
        yield str(file), [_unreadable(str(file), error)]


def _unreadable(name: str, error: OSError) -> Issue:
    said = f"The file cannot be read ({error.strerror or type(error).__name__}). Check its name and rights."
    return Issue("fatal", "not-found", "file-unreadable", said, source=name)
