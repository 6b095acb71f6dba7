"""`fhirgallop heart-cycle`: one examination as a drawing."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from fhirgallop.cli.shared import chart_of, moment, one_exam, whole_file

if TYPE_CHECKING:
    from fhirgallop.exam.context import Context
    from fhirgallop.exam.exam import Exam


def command(
    record: Annotated[Path, typer.Argument(help="The record of one examination.")],
    map_: Annotated[Path, typer.Option("--map", help="The template map (YAML).")],
    chart: Annotated[Path | None, typer.Option(help="The patient's chart: a FHIR Bundle (JSON).")] = None,
    out: Annotated[Path | None, typer.Option(help="File for the drawing; else standard output.")] = None,
    words: Annotated[bool, typer.Option("--words", help="Tell it in sentences instead.")] = False,
) -> None:
    """Draw the heart cycle of one examination as SVG.

    Sounds, murmurs, jugular wave and diastolic pressure in their time, as far as they were said; rhythm and
    pressures from the chart where the examination has none. A scheme, not a recording. Exit codes: 0 drawn;
    1 record or chart refused; 2 the call was wrong; 3 the map has faults; 4 a file could not be used.
    """
    from fhirgallop.drawing.cycle import heart_cycle  # noqa: PLC0415 - heavy; --help stays quick
    from fhirgallop.drawing.heart_cycle import draw  # noqa: PLC0415
    from fhirgallop.drawing.wording import description  # noqa: PLC0415

    exam = one_exam(record, map_)
    cycle = heart_cycle(exam, _context(chart, exam) if chart else None)
    text = "\n".join(description(cycle)) if words else draw(cycle)
    if out is None:
        typer.echo(text)
        return
    with whole_file(out) as file:
        file.write(text.encode() + b"\n")


def _context(chart: Path, exam: Exam) -> Context:
    from fhirgallop.chart.read import read_chart  # noqa: PLC0415

    return read_chart(chart_of(chart), exam, moment(None, "--now")).context
