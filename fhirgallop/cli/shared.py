"""What the commands share: exit codes, where people are spoken to, files that appear whole or not at all."""

from __future__ import annotations

import os
import sys
import tempfile
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from enum import IntEnum, StrEnum
from pathlib import Path
from typing import IO, TYPE_CHECKING, Any, NoReturn

import typer
from rich.console import Console

if TYPE_CHECKING:
    from fhirgallop.exam.exam import Exam
    from fhirgallop.outcome import Issue


class Exit(IntEnum):
    """Exit codes, as every --help says."""

    WELL = 0
    REFUSED = 1
    USAGE = 2
    FAULTY = 3
    UNUSABLE = 4
    ENDED = 143  # 128 and the number of SIGTERM, as shells say it


class EditionName(StrEnum):
    """The FHIR editions, for the command line."""

    R4 = "R4"
    R4B = "R4B"
    R5 = "R5"


def people() -> Console:
    """The console for tables and progress: standard error, so that standard output holds data alone."""
    return Console(stderr=True, highlight=False)


def complain(text: str) -> None:
    """One line for the operator."""
    print(text, file=sys.stderr)


@contextmanager
def whole_file(path: Path, *, may_be_empty: bool = False) -> Iterator[IO[bytes]]:
    """A file to write that appears at `path` when the block ends well, and not at all otherwise.

    Nothing appears either where nothing was written, unless the file `may_be_empty`.
    """
    with _named(path):
        handle, name = tempfile.mkstemp(prefix=f".{path.name}.", dir=path.parent)
    temporary = Path(name)
    try:
        with os.fdopen(handle, "wb") as file:
            yield file
            file.flush()
            size = file.tell()
            os.fsync(file.fileno())
        if size or may_be_empty:
            temporary.chmod(0o640)
            with _named(path):
                temporary.replace(path)
    finally:
        temporary.unlink(missing_ok=True)


@contextmanager
def _named(path: Path) -> Iterator[None]:
    """An error of the file system under the name that the operator gave."""
    try:
        yield
    except OSError as error:
        raise OSError(error.errno, error.strerror, str(path)) from None


def resource(path: Path, kind: str, option: str) -> dict[str, Any]:
    """The FHIR resource of one kind in a file that an argument or option names."""
    from fhirgallop.codes import fhirjson  # noqa: PLC0415 - heavy; --help stays quick

    value, issues = fhirjson.read(path.read_bytes(), source=str(path))
    if not isinstance(value, dict) or value.get("resourceType") != kind:
        why = f": {issues[0].text}" if issues else ""
        raise typer.BadParameter(f"this file holds no {kind}{why}", param_hint=option)
    return value


def moment(text: str | None, option: str) -> datetime:
    """The instant that an option names; this moment when it is left out."""
    if text is None:
        return datetime.now(tz=UTC)
    try:
        found = datetime.fromisoformat(text)
    except ValueError:
        found = None
    if found is None or found.tzinfo is None:
        raise typer.BadParameter(
            "give an instant with a zone, such as 2026-12-01T08:30:00Z", param_hint=option
        )
    return found


def one_exam(record: Path, map_: Path) -> Exam:
    """The examination in a file that holds exactly one."""
    from fhirgallop import api  # noqa: PLC0415
    from fhirgallop.intake.record import LocalRecord  # noqa: PLC0415

    template = api.read_map(map_)
    reads = list(api.read_records(record))
    if len(reads) != 1:
        raise typer.BadParameter("give the record of exactly one examination", param_hint="RECORD")
    one = reads[0]
    if not isinstance(one, LocalRecord):
        refuse(one.issues)
    result = api.process(one, template)
    if result.exam is None or not result.ok:
        refuse(result.issues)
    return result.exam


def chart_of(path: Path) -> Any:
    """The chart in a file, as JSON; what of it cannot be used is told by whoever reads it."""
    from fhirgallop.codes import fhirjson  # noqa: PLC0415 - heavy; --help stays quick

    value, issues = fhirjson.read(path.read_bytes(), source=str(path))
    if value is None:
        refuse(issues)
    return value


def refuse(issues: Iterable[Issue]) -> NoReturn:
    """Tells the issues and ends the command."""
    for issue in issues:
        complain(str(issue))
    raise typer.Exit(Exit.REFUSED)
