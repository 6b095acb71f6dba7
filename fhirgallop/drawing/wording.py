"""The heart cycle in words: for screen readers, for print, and for what has no place in the drawing."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Literal

from fhirgallop.drawing.cycle import HeartCycle, Strip, value_of
from fhirgallop.exam import catalogue
from fhirgallop.exam.entry import Entry
from fhirgallop.exam.presence import Presence


def description(cycle: HeartCycle, only: Literal["", "jvp"] = "") -> list[str]:
    """Sentences that tell all that the drawing shows; `only="jvp"` those of the jugular vein."""
    vein = [f"{_entry(entry)}." for entry in cycle.vein.said] if cycle.vein else []
    if only:
        return vein
    known = catalogue.load()
    rhythm = known.axes["rhythm"].values.get(cycle.rhythm)
    told = [f"Rhythm: {rhythm.label} ({cycle.rhythm_source})." if rhythm else "Rhythm not known."]
    if cycle.atrium == "none":
        told.append("No organised atrial beat, so no P wave.")
    for strip in cycle.strips:
        told += list(_strip(strip))
    told += vein
    if cycle.pressure:
        told.append(
            f"Left ventricular end-diastolic pressure {cycle.pressure.end} mmHg ({cycle.pressure.source})."
        )
    told += [f"{_entry(entry)}." for entry in cycle.elsewhere]
    told.append("A scheme, not a recording; what is not drawn was not said, and is not thereby absent.")
    return told


def site_name(site: str) -> tuple[str, list[str]]:
    """Short name of a site and what stands below it."""
    if not site:
        return "Site not stated", []
    label = catalogue.load().axes["site"].values[site].label
    name, _, rest = label.partition(" (")
    return name, [rest.removesuffix(")")] if rest and len(rest) < 24 else []


def _strip(strip: Strip) -> Iterable[str]:
    findings = catalogue.load().findings
    parts: list[str] = []
    for beat in strip.beats:
        if beat.presence is None or not beat.label:
            continue
        name = findings[beat.finding].label if beat.finding in findings else beat.label
        remark = f" ({beat.remark})" if beat.remark else ""
        state = "absent" if not beat.height else beat.presence.in_words
        parts.append(f"{name} {state}{remark}")
    for noise in strip.noises:
        words = [noise.remark, noise.shape and f"shape {noise.shape}", noise.pitch and f"{noise.pitch} pitch"]
        said = ", ".join(word for word in words if word)
        placed = noise.spans or noise.presence is not Presence.PRESENT
        place = "" if placed else ", place in the cycle not stated"
        label = findings[noise.finding].label
        parts.append(f"{label} {noise.presence.in_words}{f' ({said})' if said else ''}{place}")
    if parts:
        yield f"{site_name(strip.site)[0]}: {'; '.join(parts)}."


def _entry(entry: Entry) -> str:
    known = catalogue.load()
    finding = known.findings[entry.finding]
    if entry.measure and entry.presence is Presence.PRESENT:
        said = f"{entry.measure.comparator}{entry.measure.value} {entry.measure.unit}"
    elif entry.answers and entry.presence is Presence.PRESENT:
        values = known.axes[finding.answers].values
        said = ", ".join(values[answer].label.lower() for answer in entry.answers)
    else:
        said = entry.presence.in_words
    posture = known.axes["posture"].values.get(value_of(entry, "posture"))
    return f"{finding.label}: {said}{f', {posture.label.lower()}' if posture else ''}"
