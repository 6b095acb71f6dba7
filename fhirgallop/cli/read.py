"""`fhirgallop read`: one line of an examination, with its findings underlined."""

from __future__ import annotations

import sys
from typing import TYPE_CHECKING, Annotated, Final

import typer
from rich.console import Console
from rich.text import Text

from fhirgallop.cli.shared import Exit, complain

if TYPE_CHECKING:
    from fhirgallop.exam.catalogue import Catalogue
    from fhirgallop.exam.entry import Entry, Qualifier
    from fhirgallop.phrases import ReadLine

_UNREAD: Final = {
    "unknown": "not understood",
    "past": "said of the past, not of today",
    "family": "said of another person",
    "condition": "said under a condition",
    "patient": "said by the patient",
    "doubtful": "not read, see below",
}


def command(
    text: Annotated[str, typer.Argument(help="The line, in quotation marks; - reads standard input.")],
    language: Annotated[str, typer.Option(help="Language of its wordings: a file of two letters.")] = "en",
) -> None:
    """Read one line of a cardiovascular examination into findings.

    Words that went into a finding are underlined; the rest is listed. A reading is a suggestion for a person
    to check. Exit codes: 0 all words understood; 1 words left over, or doubt; 2 the call was wrong; 4 no
    such language.
    """
    from fhirgallop.exam import catalogue  # noqa: PLC0415 - heavy; --help stays quick
    from fhirgallop.phrases import reader  # noqa: PLC0415

    read = reader(language).read(sys.stdin.read() if text == "-" else text)
    _show(read, catalogue.load())
    for issue in read.issues:
        complain(str(issue))
    if read.unread or read.issues:
        raise typer.Exit(Exit.REFUSED)


def _show(read: ReadLine, known: Catalogue) -> None:
    console = Console(highlight=False, soft_wrap=True)
    line = Text(read.text)
    marks = [" "] * len(read.text)
    for finding in read.findings:
        line.stylize("underline", finding.start, finding.end)
        marks[finding.start : finding.end] = "~" * (finding.end - finding.start)
    for part in read.unread:
        line.stylize("dim", part.start, part.end)
        marks[part.start : part.end] = "." * (part.end - part.start)
    console.print(line)
    # Where no style can be shown, and for whoever cannot see it, the same as signs below a single line.
    if "\n" not in read.text and not console.is_terminal:
        console.print(Text("".join(marks).rstrip()))
    for finding in read.findings:
        console.print(Text(f"  {described(finding.entry, known)}  <- {_quoted(read.words(finding))}"))
    for part in read.unread:
        console.print(Text(f"  {_UNREAD[part.why]}: {_quoted(read.words(part))}", style="dim"))


def described(entry: Entry, known: Catalogue) -> str:
    """An entry in words of the catalogue."""
    definition = known.findings[entry.finding]
    if entry.measure is not None:
        measure = entry.measure
        high = f" to {measure.high}" if measure.high is not None else ""
        said = f"{measure.comparator}{measure.value}{high} {measure.unit}"
    else:
        answers = known.answers(definition)
        said = ", ".join(answers[one].label for one in entry.answers) or str(entry.presence)
    details = "; ".join(_detail(qualifier, known) for qualifier in entry.qualifiers)
    reason = f" because: {entry.reason}" if entry.reason else ""
    return f"{definition.label}: {said}{f' ({details})' if details else ''}{reason} [{definition.id}]"


def _detail(qualifier: Qualifier, known: Catalogue) -> str:
    axis = known.axes[qualifier.axis]
    value = str(qualifier.grade) if qualifier.grade else axis.values[qualifier.value].label
    return f"{axis.label}: {value}"


def _quoted(words: str) -> str:
    return f'"{" ".join(words.split())}"'
