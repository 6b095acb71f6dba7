"""What a run gave, for the department: the same sections as text, as JSON and as one HTML page.

Field names, findings and rules with counts; never a value of a record, but for unknown wordings when the run
was asked to keep them.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any, Final

from fhirgallop.bulk.tally import OUTSIDE, Tally
from fhirgallop.bulk.wish import Wish
from fhirgallop.exam import catalogue
from fhirgallop.exam.presence import Presence
from fhirgallop.observations.bundle import instant

Cell = str | int | float
Rows = tuple[tuple[Cell, ...], ...]

_IMPLAUSIBLE: Final = ("exam-implausible-value", "exam-in-the-future", "exam-before-1900")
_TIERS: Final = {
    "U": "U: urgent phrase",
    "T1": "T1: asked at entry, may interrupt",
    "T2": "T2: in the margin",
    "T3": "T3: detail panel only",
    OUTSIDE: "most rules are not for them",
}
_THOUSAND: Final = 1000


@dataclass(frozen=True, slots=True)
class Section:
    """One table of the report.

    Attributes:
        id: its name in the JSON form.
        title: heading.
        note: how to read it.
        columns: headings of the columns.
        rows: cells; a number is a count, or a rate with one decimal.
        drawn: number of the column that is drawn as bars, named by the first; -1 for none.
    """

    id: str
    title: str
    note: str
    columns: tuple[str, ...]
    rows: Rows
    drawn: int = -1


@dataclass(frozen=True, slots=True)
class Report:
    """All of it, in the order of reading."""

    title: str
    sections: tuple[Section, ...]

    def as_dict(self) -> dict[str, Any]:
        """JSON values."""
        return {
            "title": self.title,
            "sections": {
                s.id: {"title": s.title, "note": s.note, "columns": s.columns, "rows": s.rows}
                for s in self.sections
            },
        }

    def as_text(self) -> str:
        """Tables for a terminal or a mail."""
        return "\n".join([self.title, "", *(line for section in self.sections for line in _text(section))])


def report(tally: Tally, wish: Wish) -> Report:
    """The report of a run."""
    return Report(
        f"Back-fill by map {wish.map_name}, converted {instant(wish.recorded)}",
        (
            _records(tally),
            _years(tally),
            _findings(tally),
            _by_year(tally),
            _named("unread", "Fields that no line of the map reads", tally.unread),
            _named("unknown", "Fields with values that the map does not know", tally.unknown),
            *([_wordings(tally)] if tally.wordings else []),
            _issues("issues", "Issues by rule", "", tally.issues),
            _issues(
                "implausible",
                "Implausible values and times",
                "Flagged; a value that is only unlikely is kept as it was entered.",
                Counter({key: count for key, count in tally.issues.items() if key[1] in _IMPLAUSIBLE}),
            ),
            _repeats(tally),
            _tiers(tally, wish),
            _rules(tally),
        ),
    )


def _records(tally: Tally) -> Section:
    words = {
        "coded": "coded, checked and written",
        "refused": "refused (see errors.csv)",
        "unreadable": "unreadable (see errors.csv)",
    }
    rows = [(text, tally.became[name,]) for name, text in words.items()]
    return Section("records", "Records", "", ("", "records"), (*rows, ("all", tally.records())), 1)


def _years(tally: Tally) -> Section:
    rows = tuple((year, count) for (year,), count in sorted(tally.years.items()))
    return Section("years", "Examinations coded, by year", "", ("year", "examinations"), rows, 1)


def _findings(tally: Tally) -> Section:
    counts: Counter[tuple[str, str]] = Counter()
    for (_, finding, presence), count in tally.findings.items():
        counts[finding, presence] += count
    names = sorted({finding for finding, _ in counts})
    rows: Rows = tuple(
        (_label(name), name, *(counts[name, presence.value] for presence in Presence)) for name in names
    )
    note = "A measured or chosen value counts as present. What nobody recorded is not counted at all."
    return Section(
        "findings", "Coded, by finding", note, ("finding", "id", *(p.value for p in Presence)), rows, 2
    )


def _by_year(tally: Tally) -> Section:
    years = sorted({year for year, _, _ in tally.findings})
    names = sorted({finding for _, finding, _ in tally.findings})
    present = Presence.PRESENT.value
    rows: Rows = tuple((_label(n), *(tally.findings[year, n, present] for year in years)) for n in names)
    return Section("findingsByYear", "Present, by finding and year", "", ("finding", *years), rows)


def _label(finding: str) -> str:
    known = catalogue.load().findings.get(finding)
    return known.label if known else finding


def _named(name: str, title: str, counts: Counter[tuple[str]]) -> Section:
    rows = tuple((field, count) for (field,), count in _most(counts))
    return Section(name, title, "", ("field", "records"), rows, 1)


def _wordings(tally: Tally) -> Section:
    rows = tuple((field, words, count) for (field, words), count in _most(tally.wordings))
    note = "These are patients' data; do not pass them on with the report."
    return Section(
        "wordings", "Wordings that the map does not know", note, ("field", "wording", "times"), rows
    )


def _issues(name: str, title: str, note: str, counts: Counter[tuple[str, str, str]]) -> Section:
    rows = tuple((rule, severity, field, count) for (severity, rule, field), count in _most(counts))
    return Section(name, title, note, ("rule", "severity", "field", "times"), rows, 3)


def _repeats(tally: Tally) -> Section:
    note = "They were coded; the receiver keeps the last one sent, for they are the same resources."
    rows = (
        ("the same in all fields", tally.repeats["same",]),
        ("the same number, other content", tally.repeats["differs",]),
    )
    return Section("repeats", "Examinations that came before", note, ("", "examinations"), rows)


def _tiers(tally: Tally, wish: Wish) -> Section:
    reviewed = tally.reviewed[()]
    each = wish.review_each
    every = "Every coded examination" if each == 1 else f"One in {each} coded examinations"
    note = (
        f"{every} was held against the rules ({reviewed:,}); without the patients' charts, so what only "
        "a chart settles stays open and is not counted; before repeats are held back. That nothing is raised "
        "is no reassurance."
        if each
        else "No examination was held against the rules."
    )
    rows = tuple(
        (words, tally.tiers[tier,], _rate(tally.tiers[tier,], reviewed)) for tier, words in _TIERS.items()
    )
    columns = ("tier", "examinations", "per thousand")
    return Section("tiers", "What the rules would have raised, by tier", note, columns, rows, 2)


def _rules(tally: Tally) -> Section:
    reviewed = tally.reviewed[()]
    rows = tuple((rule, tier, count, _rate(count, reviewed)) for (tier, rule), count in _most(tally.rules))
    columns = ("rule", "tier", "examinations", "per thousand")
    return Section("rules", "What the rules would have raised, by rule", "", columns, rows, 3)


def _rate(count: int, of: int) -> float:
    return round(_THOUSAND * count / of, 1) if of else 0.0


def _most(counts: Counter[Any]) -> list[tuple[Any, int]]:
    """Most frequent first, then by name."""
    return sorted(counts.items(), key=lambda item: (-item[1], item[0]))


def shown(cell: Cell) -> str:
    """A cell for people; control characters of hostile names are not for a terminal."""
    if isinstance(cell, str):
        return "".join(sign if sign.isprintable() else "\N{REPLACEMENT CHARACTER}" for sign in cell)
    return f"{cell:,}" if isinstance(cell, int) else f"{cell:,.1f}"


def _text(section: Section) -> Iterator[str]:
    yield section.title
    yield "=" * len(section.title)
    if section.note:
        yield section.note
    if section.rows:
        cells = [section.columns, *([shown(cell) for cell in row] for row in section.rows)]
        widths = [max(len(row[place]) for row in cells) for place in range(len(section.columns))]
        for number, row in enumerate(cells):
            values: Sequence[Cell] = section.rows[max(number - 1, 0)]
            yield "  ".join(
                cell.ljust(width) if isinstance(value, str) else cell.rjust(width)
                for cell, width, value in zip(row, widths, values, strict=True)
            ).rstrip()
    else:
        yield "none"
    yield ""
