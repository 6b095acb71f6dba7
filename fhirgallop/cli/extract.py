"""`fhirgallop extract`: the Observations of a form that carries its own codes."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Annotated

import typer

from fhirgallop.cli.shared import EditionName, Exit, complain, resource, whole_file


def command(
    response: Annotated[Path, typer.Argument(help="A completed QuestionnaireResponse (JSON).")],
    form: Annotated[
        Path, typer.Option("--form", help="The Questionnaire it answers (JSON), with its codes.")
    ],
    edition: Annotated[EditionName, typer.Option(help="FHIR edition to write.")] = EditionName.R4,
    out: Annotated[Path | None, typer.Option(help="File for the Bundle; else standard output.")] = None,
) -> None:
    """Make Observations of a form whose questions carry codes, without a template map.

    Observation-based extraction of the Structured Data Capture guide. Exit codes: 0 well; 1 the response was
    refused, or its Observations do not conform; 2 the call was wrong; 4 a file could not be used.
    """
    from fhirgallop.codes import fhirjson  # noqa: PLC0415 - heavy together; --help stays quick
    from fhirgallop.conformance.validator import validate  # noqa: PLC0415
    from fhirgallop.observations.bundle import transaction  # noqa: PLC0415
    from fhirgallop.observations.extract import extract  # noqa: PLC0415
    from fhirgallop.observations.identity import identity_of  # noqa: PLC0415
    from fhirgallop.outcome import has_errors, ordered  # noqa: PLC0415

    observations, issues = extract(
        resource(response, "QuestionnaireResponse", "RESPONSE"),
        resource(form, "Questionnaire", "--form"),
        edition=edition.value,
    )
    bundle = transaction({identity_of(made): made for made in observations})
    if observations:
        issues += validate(bundle, edition.value)
    for issue in ordered(issues):
        complain(str(issue))
    if has_errors(issues):
        raise typer.Exit(Exit.REFUSED)
    if not observations:
        return
    text = fhirjson.pretty(bundle) + b"\n"
    if out is None:
        sys.stdout.buffer.write(text)
        return
    with whole_file(out) as file:
        file.write(text)
