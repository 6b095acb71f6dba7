"""The command `fhirgallop`: its groups, its exit codes, and how mistakes of the operator are told."""

from __future__ import annotations

import signal
import sys
from types import FrameType
from typing import Annotated

import typer

from fhirgallop.cli import (
    audit,
    backfill,
    code,
    database,
    deliveries,
    demo,
    draw,
    extract,
    hand_over,
    maps,
    read,
    review,
    rules,
    serve,
    token,
    validate,
)
from fhirgallop.cli.shared import Exit, complain
from fhirgallop.errors import FhirgallopError, MapError, SettingsError
from fhirgallop.version import VERSION

app = typer.Typer(
    help="From the clinic's heart-examination form to coded, checked FHIR Observations.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    epilog="Exit codes: 0 all well; 1 something was refused or found; 2 the call was wrong; 3 a map or a "
    "setting has faults; 4 a file or an address could not be used.",
)
app.command("code")(code.command)
app.command("backfill")(backfill.command)
app.command("hand-over")(hand_over.command)
app.command("extract")(extract.command)
app.command("validate")(validate.command)
app.command("read")(read.command)
app.command("review")(review.command)
app.command("heart-cycle")(draw.command)
app.command("demo")(demo.command)
app.command("serve")(serve.command)
app.command("token")(token.command)
app.add_typer(maps.app, name="map")
app.add_typer(rules.app, name="rules")
app.add_typer(database.app, name="database")
app.add_typer(audit.app, name="audit")
app.add_typer(deliveries.app, name="deliveries")


def _version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"fhirgallop {VERSION}")
        raise typer.Exit


@app.callback()
def _root(
    _: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version.")
    ] = False,
) -> None:
    """See the help text of the application."""


def _ended(_number: int, _frame: FrameType | None) -> None:
    """Leaves by the ordinary way, so that what is half-written is cleared away."""
    sys.exit(Exit.ENDED)


def main() -> None:
    """Entry point: runs the command and turns an operator's mistake into a sentence and an exit code."""
    signal.signal(signal.SIGTERM, _ended)
    try:
        app()
    except MapError as error:
        for issue in error.issues:
            complain(str(issue))
        sys.exit(Exit.FAULTY)
    except SettingsError as error:
        complain(str(error))
        sys.exit(Exit.FAULTY)
    except FhirgallopError as error:
        complain(str(error))
        sys.exit(Exit.UNUSABLE)
    except OSError as error:
        said = error.strerror or type(error).__name__
        complain(f"{error.filename or 'a file'}: {said}; check its name, its place and your rights")
        sys.exit(Exit.UNUSABLE)
