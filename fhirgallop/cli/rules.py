"""`fhirgallop rules`: what the rules are, one rule in full, a check of rule files, the sheet to sign."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from fhirgallop.cli.shared import Exit, complain

if TYPE_CHECKING:
    from fhirgallop.reasoning.rulebook import Rulebook

app = typer.Typer(no_args_is_help=True, help="The clinical rules: list, show, check, and the sheet to sign.")
Site = Annotated[Path | None, typer.Option("--site", help="The site's own rule file (YAML), over ours.")]


@app.command("list")
def list_(
    site: Site = None,
    tier: Annotated[str | None, typer.Option(help="Only one tier: U, T1, T2, T3 or T0.")] = None,
) -> None:
    """Every rule in force, a line each; then the rows of the evidence that are no rule, with the reason."""
    book = _book(site)
    for rule in sorted(book.rules.values(), key=lambda r: (r.tier.value != "U", r.tier.value, r.id)):
        if tier in (None, rule.tier.value):
            state = "silenced" if rule.id in book.silenced else rule.tier.value
            typer.echo(f"{state:<9}{rule.id:<48}{rule.relation.value:<13}{rule.strength.value}")
    if tier is None:
        for row, reason in book.left_out.items():
            typer.echo(f"{'left out':<9}{row}: {reason}")


@app.command()
def show(name: Annotated[str, typer.Argument(help="Id of a rule.")], site: Site = None) -> None:
    """One rule: what it says, why, and how its source is known."""
    from fhirgallop.cards.signoff import rule_text  # noqa: PLC0415 - heavy; --help stays quick

    book = _book(site)
    rule = book.rules.get(name)
    if rule is None:
        raise typer.BadParameter("there is no such rule; see fhirgallop rules list", param_hint="NAME")
    typer.echo(rule_text(rule, book), nl=False)


@app.command()
def check(
    files: Annotated[list[Path] | None, typer.Argument(help="Site rule files; none checks our own.")] = None,
) -> None:
    """Check rule files whole. Exit code 1: a fault was found."""
    from fhirgallop.reasoning import rulebook  # noqa: PLC0415

    faulty = False
    for path in files or ():
        _, issues = rulebook.with_site(path.read_text(encoding="utf-8"), str(path))
        for issue in issues:
            typer.echo(str(issue))
        faulty = faulty or any(issue.is_error for issue in issues)
    if not files:
        issues = rulebook.check_text(rulebook.shipped_texts())
        for issue in issues:
            typer.echo(str(issue))
        faulty = any(issue.is_error for issue in issues)
    complain("faults were found" if faulty else "no faults")
    if faulty:
        raise typer.Exit(Exit.REFUSED)


@app.command()
def sheet(
    site: Site = None,
    out: Annotated[Path | None, typer.Option(help="File to write (Markdown); else standard output.")] = None,
) -> None:
    """The sheet a clinician signs before the rules are used: every urgent, interruptive and advisory rule."""
    from fhirgallop.cards.signoff import signoff_sheet  # noqa: PLC0415
    from fhirgallop.cli.shared import whole_file  # noqa: PLC0415

    text = signoff_sheet(_book(site))
    if out is None:
        typer.echo(text, nl=False)
    else:
        with whole_file(out) as file:
            file.write(text.encode())


def _book(site: Path | None) -> Rulebook:
    from fhirgallop.reasoning import rulebook  # noqa: PLC0415

    if site is None:
        return rulebook.load()
    made, issues = rulebook.with_site(site.read_text(encoding="utf-8"), str(site))
    for issue in issues:
        complain(str(issue))
    if made is None:
        raise typer.Exit(Exit.FAULTY)
    return made
