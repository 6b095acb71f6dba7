"""The report as one HTML page that needs nothing else: own style, own drawings, no script.

Sources: HTML (living standard); SVG 2; WAI-ARIA 1.2 (a drawing has a name; its figures stand in the table).
"""

from __future__ import annotations

from collections.abc import Iterator
from html import escape
from typing import Final

from fhirgallop.bulk.report import Report, Section, shown

_MOST_BARS: Final = 40
_ROW: Final = 22
_LEFT: Final = 300
_WIDTH: Final = 860
_STYLE: Final = """
body{font:16px/1.5 system-ui,sans-serif;max-width:70rem;margin:2rem auto;padding:0 1rem;color:#1a1a1a;
background:#fff}
h1{font-size:1.5rem}h2{font-size:1.15rem;margin-top:2.5rem}
table{border-collapse:collapse;font-size:.9rem}
th,td{padding:.2rem .8rem .2rem 0;border-bottom:1px solid #d5d5d5;text-align:left;vertical-align:top}
.n{text-align:right;font-variant-numeric:tabular-nums}
.wide{overflow-x:auto}svg{max-width:100%;height:auto;font-size:13px}
"""
_HEAD: Final = """<!DOCTYPE html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta name="viewport" content="width=device-width, initial-scale=1">
<meta http-equiv="Content-Security-Policy" content="default-src 'none'; style-src 'unsafe-inline'">
<title>{title}</title>
<style>{style}</style>
</head>
<body>
<main>
<h1>{title}</h1>
"""


def page(report: Report) -> str:
    """The whole page."""
    parts = [_HEAD.format(title=escape(report.title), style=_STYLE)]
    for section in report.sections:
        parts += _section(section)
    return "".join([*parts, "</main>\n</body>\n</html>\n"])


def _section(section: Section) -> Iterator[str]:
    yield f'<section aria-labelledby="{section.id}">\n<h2 id="{section.id}">{escape(section.title)}</h2>\n'
    if section.note:
        yield f"<p>{escape(section.note)}</p>\n"
    if section.rows:
        if section.drawn >= 0:
            yield _bars(section)
        yield from _table(section)
    else:
        yield "<p>None.</p>\n"
    yield "</section>\n"


def _table(section: Section) -> Iterator[str]:
    yield f'<div class="wide" tabindex="0" role="region" aria-label="{escape(section.title)}"><table>\n<tr>'
    for name, first in zip(section.columns, section.rows[0], strict=True):
        yield f'<th scope="col"{_kind(first)}>{escape(shown(name))}</th>'
    yield "</tr>\n"
    for row in section.rows:
        cells = "".join(f"<td{_kind(cell)}>{escape(shown(cell))}</td>" for cell in row)
        yield f"<tr>{cells}</tr>\n"
    yield "</table></div>\n"


def _kind(cell: str | float) -> str:
    return "" if isinstance(cell, str) else ' class="n"'


def _bars(section: Section) -> str:
    """The largest values of one column as bars."""
    named = [(shown(row[0]), row[section.drawn]) for row in section.rows]
    values = [(name, float(value)) for name, value in named[:_MOST_BARS] if not isinstance(value, str)]
    largest = max((value for _, value in values), default=0.0)
    if not largest:
        return ""
    height = _ROW * len(values) + 6
    what = escape(f"{section.title}: {shown(section.columns[section.drawn])} as bars; figures in the table")
    lines = [f'<svg viewBox="0 0 {_WIDTH} {height}" width="{_WIDTH}" role="img" aria-label="{what}">']
    for place, (name, value) in enumerate(values):
        y = place * _ROW + 4
        long = (_WIDTH - _LEFT - 90) * value / largest
        short = name if len(name) <= 40 else f"{name[:39]}\N{HORIZONTAL ELLIPSIS}"
        figure = shown(int(value)) if value.is_integer() else shown(value)
        lines.append(
            f'<text x="{_LEFT - 8}" y="{y + 13}" text-anchor="end">{escape(short)}</text>'
            f'<rect x="{_LEFT}" y="{y}" width="{long:.1f}" height="{_ROW - 6}" fill="#2b5f8a"/>'
            f'<text x="{_LEFT + long + 6:.1f}" y="{y + 13}">{figure}</text>'
        )
    return "\n".join([*lines, "</svg>\n"])
