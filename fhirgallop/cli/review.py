"""`fhirgallop review`: one examination held against the patient's chart."""

from __future__ import annotations

from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from fhirgallop.cli.shared import Exit, chart_of, complain, moment, one_exam

if TYPE_CHECKING:
    from fhirgallop.outcome import Issue


class Format(StrEnum):
    """How the review is written."""

    TEXT = "text"
    JSON = "json"


def command(  # noqa: PLR0913, PLR0917 - one argument an option
    record: Annotated[Path, typer.Argument(help="The record of one examination.")],
    map_: Annotated[Path, typer.Option("--map", help="The template map (YAML).")],
    chart: Annotated[Path, typer.Option(help="The patient's chart: a FHIR Bundle (JSON).")],
    output: Annotated[Format, typer.Option("--format", help="A sheet to read, or JSON.")] = Format.TEXT,
    now: Annotated[
        str | None,
        typer.Option(help="Moment of review (ISO 8601 with zone); else this moment."),
    ] = None,
    rules: Annotated[Path | None, typer.Option(help="The site's own rule file (YAML).")] = None,
    codes: Annotated[Path | None, typer.Option(help="The site's own codes for the chart (CSV).")] = None,
    server: Annotated[str, typer.Option(help="Address of the FHIR server the chart comes from.")] = "",
) -> None:
    """Hold one examination against the chart: what each finding needs, what does not go together.

    Supports clinical judgement and does not replace it. Exit codes: 0 reviewed, whatever was found; 1 record
    or chart refused; 2 the call was wrong; 3 the map, the rules or the codes have faults; 4 a file could not
    be used.
    """
    from fhirgallop.cards.memory import Memory  # noqa: PLC0415 - heavy; --help stays quick
    from fhirgallop.cards.policy import decide  # noqa: PLC0415
    from fhirgallop.cards.sheet import sheet  # noqa: PLC0415
    from fhirgallop.chart.read import read_chart  # noqa: PLC0415
    from fhirgallop.codes import fhirjson  # noqa: PLC0415
    from fhirgallop.reasoning import rulebook  # noqa: PLC0415
    from fhirgallop.reasoning.review import review  # noqa: PLC0415

    at = moment(now, "--now")
    book = _site_rules(rules) if rules else rulebook.load()
    exam = one_exam(record, map_)
    tables = _site_codes(codes) if codes else None
    read = read_chart(chart_of(chart), exam, at, base=server, tables=tables)
    found = review(exam, read.context, rules=book)
    encounter = exam.encounter.value if exam.encounter else exam.identifier
    decision = decide(
        found, Memory(exam.patient.value), encounter=encounter or "this one", now=at, rules=book
    )
    if output is Format.JSON:
        whole: dict[str, Any] = {
            **decision.as_dict(),
            "review": found.as_dict(),
            "issues": [str(issue) for issue in read.issues],
        }
        typer.echo(fhirjson.pretty(whole).decode())
    else:
        typer.echo(sheet(exam, found, decision, read.issues), nl=False)
        for issue in read.issues:
            complain(str(issue))


def _site_rules(path: Path) -> Any:
    from fhirgallop.reasoning import rulebook  # noqa: PLC0415

    return _usable(*rulebook.with_site(path.read_text(encoding="utf-8"), str(path)))


def _site_codes(path: Path) -> Any:
    from fhirgallop.chart import tables  # noqa: PLC0415

    return _usable(*tables.with_site(path.read_text(encoding="utf-8"), str(path)))


def _usable(made: Any, issues: list[Issue]) -> Any:
    for issue in issues:
        complain(str(issue))
    if made is None:
        raise typer.Exit(Exit.FAULTY)
    return made
