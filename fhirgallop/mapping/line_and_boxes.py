"""Findings read from lines of text, held against the boxes of the same record.

What only the line says becomes an entry of its own. Where a box says the same, the box stands and the words
go with it. Where they disagree, that is an error, and nothing is resolved in silence.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Final

from fhirgallop.exam.catalogue import Catalogue
from fhirgallop.exam.entry import Entry, Qualifier
from fhirgallop.exam.presence import Presence
from fhirgallop.mapping.run import Run

_SURE: Final = (Presence.PRESENT, Presence.ABSENT)


def side_by_side(run: Run, catalogue: Catalogue) -> None:
    """Moves the entries read from lines into the examination, and notes where line and boxes disagree."""
    if not run.lines:
        return
    boxes: dict[str, list[int]] = {}
    for place, entry in enumerate(run.entries):
        if not entry.withdrawn:
            boxes.setdefault(entry.finding, []).append(place)
    for entry in run.lines:
        places = boxes.get(entry.finding, [])
        if not places:
            run.entries.append(entry)
        elif len(places) > 1:
            run.entries.append(replace(entry, instance=f"line{entry.instance}"))
            _several(run, entry, catalogue)
        else:
            _against(run, places[0], entry, catalogue)
    run.lines.clear()


def _against(run: Run, place: int, line: Entry, catalogue: Catalogue) -> None:
    box = run.entries[place]
    label = catalogue.findings[line.finding].label
    both = ", ".join(dict.fromkeys((*box.fields, *line.fields)))
    if wrong := _disagreement(box, line):
        words = (
            f"{label}: the box and the line of text disagree ({wrong}). Keep what is true, and correct the "
            "other."
        )
        run.issue("error", "conflict", "map-line-and-box-disagree", words, both)
        return
    if box.presence != line.presence:
        words = (
            f"{label}: the box says {box.presence}, the line of text {line.presence}; the box was kept, "
            "the words go with it. Check them."
        )
        run.issue("warning", "conflict", "map-line-and-box-differ", words, both)
        added: tuple[Qualifier, ...] = ()
    else:
        spoken = {qualifier.axis for qualifier in box.qualifiers}
        added = tuple(q for q in line.qualifiers if q.axis not in spoken)
    run.entries[place] = replace(
        box,
        qualifiers=tuple(sorted((*box.qualifiers, *added), key=lambda q: (q.axis, q.value, q.text))),
        notes=tuple(dict.fromkeys((*box.notes, *line.notes))),
        fields=tuple(dict.fromkeys((*box.fields, *line.fields))),
    )


def _disagreement(box: Entry, line: Entry) -> str:
    """What they disagree about; empty for nothing."""
    if box.presence != line.presence:
        sure = box.presence in _SURE and line.presence in _SURE
        looked = box.presence.looked_for != line.presence.looked_for
        return "presence" if sure or looked else ""
    if box.presence is not Presence.PRESENT:
        return ""
    if box.answers != line.answers and box.answers and set(box.answers) != set(line.answers):
        return "answer"
    if box.measure and line.measure and box.measure.value != line.measure.value:
        return "number"
    axes = {qualifier.axis for qualifier in box.qualifiers}
    for axis in sorted(axes & {qualifier.axis for qualifier in line.qualifiers}):
        if _on(box, axis) != _on(line, axis):
            return axis
    return ""


def _on(entry: Entry, axis: str) -> set[tuple[str, object]]:
    return {(q.value, q.grade) for q in entry.qualifiers if q.axis == axis}


def _several(run: Run, line: Entry, catalogue: Catalogue) -> None:
    label = catalogue.findings[line.finding].label
    words = (
        f"{label}: several boxes speak of it, and the line of text does not say which it means; it was kept "
        "as an entry of its own. Check that it is not the same twice."
    )
    run.issue("warning", "conflict", "map-line-beside-boxes", words, ", ".join(line.fields))
