"""What a form of the bench asks for, as a change of the draft's text."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

from fhirgallop.exam import catalogue
from fhirgallop.mapping.suggest import RECORD
from fhirgallop.service.desk import changes, record_changes
from fhirgallop.service.desk.brought import FieldSeen
from fhirgallop.service.desk.forms import Form, word
from fhirgallop.service.desk.uses import axis_label, label
from fhirgallop.service.desk.workbench import PARTS, Bench

_MOST_TEXT: Final = 512 * 1024
_SIDES: Final = ("", "left", "right", "both")


class AskedError(Exception):
    """What was asked for makes no sense; the text says why, and what to do."""


@dataclass(frozen=True, slots=True)
class Done:
    """The text after a change, what was done in words, and whether to go on to the next open field."""

    text: str
    did: str
    go_on: bool = False


def done(bench: Bench, sent: Form) -> Done:
    """The change that a form asks for.

    Raises:
        AskedError: it asks for nothing that can be done.
        MapError: the text of the draft cannot be read, and has to be mended first.
    """
    what = word(sent, "do", 20)
    if what == "text":
        text = sent.get("text", "")
        if len(text) > _MOST_TEXT:
            raise AskedError("The text of the map is too long.")
        return Done(text.replace("\r\n", "\n"), "text changed by hand")
    field = bench.brought.fields.get(word(sent, "field"))
    if field is None:
        raise AskedError("Choose a field first.")
    return _of_field(bench, field, what, sent)


def _of_field(bench: Bench, field: FieldSeen, what: str, sent: Form) -> Done:
    text, name = bench.draft.text, field.name
    match what:
        case "offer" | "pick":
            return _target(bench, field, word(sent, "target"), word(sent, "side", 10))
        case "describe":
            at, _, axis = word(sent, "property").partition("|")
            line = _whole(at)
            if axis not in catalogue.load().axes or line not in {place for place, _, _ in bench.lines()}:
                raise AskedError("Choose which finding the box describes, and by what.")
            finding = next(f for place, _, f in bench.lines() if place == line)
            did = f"{name}: {axis_label(axis).lower()} of {label(finding)}"
            return Done(changes.describe(text, field, axis, line, finding), did, go_on=True)
        case "remark":
            at = word(sent, "of")
            made = changes.remark(text, field, _line(bench, at) if at else None)
            return Done(made, f"{name}: remark", go_on=True)
        case "ignore":
            reason = word(sent, "reason")
            if not reason:
                raise AskedError("Say why the field is left out; whoever reads the map next wants to know.")
            return Done(changes.ignore(text, name, reason), f"{name}: ignored", go_on=True)
        case "back":
            return Done(changes.take_back(text, name), f"{name}: taken back")
        case "meanings":
            return _meanings(bench, field, sent)
    raise AskedError("Choose what the field means.")


def _target(bench: Bench, field: FieldSeen, target: str, side: str) -> Done:
    """`finding`, `finding#axis`, `record#part`; or the words of a finding, as the list has them."""
    text, name = bench.draft.text, field.name
    finding, _, axis = target.partition("#")
    if finding == RECORD:
        if axis not in PARTS:
            raise AskedError("Choose a part of the record from the list.")
        draft = bench.draft
        try:
            made = record_changes.put_record(text, field, axis, address=draft.address, zone=draft.zone)
        except record_changes.TakenError:
            raise AskedError(f"Another field is {PARTS[axis]} already; take that one back first.") from None
        return Done(made, f"{name}: {PARTS[axis]}", go_on=True)
    known = catalogue.load()
    if finding not in known.findings:
        finding = next((one.id for one in known.findings.values() if f"{one.label} · {one.id}" == target), "")
        finding = finding or next(
            (one.id for one in known.findings.values() if one.label.casefold() == target.casefold()), ""
        )
    if not finding or known.findings[finding].kind == "panel" or side not in _SIDES:
        raise AskedError("Choose a finding from the list; type a few letters of it.")
    if axis:
        if axis not in known.axes:
            raise AskedError("Choose a property from the list.")
        # a line of the finding itself, or of a kind of it; where there is none, a new one
        kinds = [(at, of) for at, _, of in bench.lines() if f"{of}.".startswith(f"{finding}.")]
        fits = [(at, of) for at, of in kinds if axis in known.findings[of].qualifiers]
        line, of = fits[0] if fits else (None, finding)
        did = f"{name}: {axis_label(axis).lower()} of {label(of)}"
        return Done(changes.describe(text, field, axis, line, of), did, go_on=True)
    return Done(changes.put_finding(text, field, finding, side), f"{name}: {label(finding)}", go_on=True)


def _meanings(bench: Bench, field: FieldSeen, sent: Form) -> Done:
    """Wordings come as pairs of fields, `wording-0` and `meaning-0`: a wording may hold any sign."""
    at = _line(bench, word(sent, "at"))
    axis = word(sent, "axis")
    meanings = {}
    for place in range(200):
        wording = sent.get(f"wording-{place}")
        if wording is None:
            break
        meanings[wording] = word(sent, f"meaning-{place}", 80)
    if (added := word(sent, "wording-new")) and (meaning := word(sent, "meaning-new", 80)):
        meanings[added] = meaning
    if axis:
        text = changes.put_qualifier_meanings(bench.draft.text, at, axis, meanings)
    else:
        told = {
            name: word(sent, name, 80)
            for name in ("unit", "decimal", "blank-means", "separator")
            if name in sent
        }
        text = changes.put_meanings(bench.draft.text, at, meanings, told)
    return Done(text, f"{field.name}: what its wordings mean", go_on=True)


def _line(bench: Bench, at: str) -> int:
    line = _whole(at)
    places = {
        use.at
        for found in bench.uses.by_field.values()
        for use in found
        if use.kind not in ("record", "ignored")
    }
    if line not in places:
        raise AskedError("That line of the map is not there any more; look at the field again.")
    return line


def _whole(text: str) -> int:
    return int(text) if text.isdecimal() and len(text) < 6 else -1
