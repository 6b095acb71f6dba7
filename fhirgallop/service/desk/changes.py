"""Changes that the desk makes to the text of a map: a field is mapped, described, ignored, taken back."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from typing import Any, Final

from fhirgallop.codes import units
from fhirgallop.exam import catalogue
from fhirgallop.mapping.editing import drop_entry, entries, put_entry
from fhirgallop.mapping.suggest import RECORD
from fhirgallop.mapping.suggest_values import Target, suggest_values
from fhirgallop.service.desk.brought import FieldSeen
from fhirgallop.service.desk.record_changes import out_of_record
from fhirgallop.service.desk.uses import Uses, axis_label, label, uses

# what a wording may mean besides a finding's own answers
_PRESENCES: Final = ("present", "absent", "uncertain")
_WHY_MISSING: Final = ("not-examined", "not-examinable", "not-recorded")
_PAIR: Final = re.compile(r"\s*[0-9]{2,3}\s*/\s*[0-9]{2,3}\s*")
_PAIRED: Final = {"pressure.systolic": 1, "pressure.diastolic": 2}


def put_finding(text: str, field: FieldSeen, finding: str, side: str = "") -> str:
    """The text with a line that reads a field as a finding, the meanings of its known values put in.

    Of a blood pressure in one box both numbers are read, each by a line of its own.

    Raises:
        MapError: the text cannot be read.
    """
    for one in _PAIRED if finding in _PAIRED and is_pair(field) else (finding,):
        text = put_entry(text, _entry(field, one, side))
    return text


def is_pair(field: FieldSeen) -> bool:
    """Whether every number in the box is two, as a blood pressure is written: 152/84."""
    values = [value for value in field.values if _has_digit(value)]
    return bool(values) and all(_PAIR.fullmatch(value) for value in values)


def _entry(field: FieldSeen, finding: str, side: str) -> dict[str, Any]:
    definition = catalogue.load().findings[finding]
    entry: dict[str, Any] = {"finding": finding}
    if side:
        entry["instance"] = side
    entry["field"] = field.name
    if definition.kind == "quantity":
        entry["number"] = _number(field, finding)
        if words := _meanings(field, Target(finding), [v for v in field.values if not _has_digit(v)]):
            entry["choice"] = words
    elif definition.kind == "text":
        entry["text"] = "true"
    else:
        entry["choice"] = _meanings(field, Target(finding), field.values)
    if side and "side" in definition.qualifiers:
        entry["qualifiers"] = {"side": {"constant": side}}
    return {key: value for key, value in entry.items() if value != {}}


def _number(field: FieldSeen, finding: str) -> dict[str, str]:
    known = units.table().by_code
    number = {"unit": field.unit if field.unit in known else catalogue.load().findings[finding].unit}
    values = [value for value in field.values if _has_digit(value)]
    if finding in _PAIRED and is_pair(field):
        number |= {"split": "/", "part": str(_PAIRED[finding])}
    if any(re.fullmatch(r"-?[0-9]+,[0-9]+", value.strip()) for value in values):
        number["decimal"] = ","
    return number


def _has_digit(value: str) -> bool:
    return any(sign.isdigit() for sign in value)


def _meanings(field: FieldSeen, target: Target, values: Iterable[str]) -> dict[str, str]:
    """What of these values is understood; the others stay open."""
    values = list(values)
    by_label = suggest_values(target, [field.labels.get(value, value) for value in values])
    by_value = suggest_values(target, values)
    found = {value: by_label.get(field.labels.get(value, value)) or by_value.get(value) for value in values}
    known = dict(meanings_of(target))
    return {value: meaning for value, meaning in found.items() if meaning in known}


def meanings_of(target: Target) -> list[tuple[str, str]]:
    """(id, words) of everything that a wording may mean in a box of this finding, or property."""
    known = catalogue.load()
    definition = known.findings.get(target.finding)
    axis = target.axis or (definition.answers if definition else "")
    own = [(one.id, one.label) for one in known.axes[axis].values.values()] if axis in known.axes else []
    if target.axis:
        return [*own, ("not-recorded", "says nothing")]
    words = (*_PRESENCES, *_WHY_MISSING) if definition and definition.kind == "sign" else _WHY_MISSING
    ids = {id_ for id_, _ in own}
    return [*own, *((word, word.replace("-", " ")) for word in words if word not in ids)]


def describe(text: str, field: FieldSeen, axis: str, at: int | None, finding: str = "murmur") -> str:
    """The text with a field that describes a finding: by a line that is there, or by a new one.

    A new line says that the finding is there whenever the field is filled.

    Raises:
        MapError: the text cannot be read.
        IndexError: there is no such line.
    """
    source: dict[str, Any] = {"field": field.name}
    known = catalogue.load().axes[axis]
    if axis == "grade":
        highest = "4" if any("/4" in value.replace(" ", "") for value in field.values) else "6"
        source["grade"] = {"of": highest}
    elif not known.values:
        source["text"] = "true"
    else:
        source["choice"] = _meanings(field, Target(finding, axis), field.values)
        if not source["choice"]:
            source = {"field": field.name, "text": "true"}
    if at is None:
        entry: dict[str, Any] = {"finding": finding, "when": {"field": field.name, "blank": "false"}}
        return put_entry(text, {**entry, "presence": "present", "qualifiers": {axis: source}})
    entry = dict(entries(text)[at].value)
    entry["qualifiers"] = {**(entry.get("qualifiers") or {}), axis: source}
    return put_entry(text, entry, at)


def remark(text: str, field: FieldSeen, at: int | None) -> str:
    """The text with a field whose words travel with a line's finding, or with the examination."""
    if at is None:
        return put_entry(text, {"note": field.name})
    return put_entry(text, {**entries(text)[at].value, "note": field.name}, at)


def ignore(text: str, name: str, reason: str) -> str:
    """The text with a field that is left out for a stated reason."""
    return put_entry(text, {"field": name, "reason": reason}, key="ignore")


def put_meanings(text: str, at: int, meanings: Mapping[str, str], told: Mapping[str, str]) -> str:
    """The text with what the wordings of a line's box mean, its unit, and what a blank box means.

    Args:
        text: the map.
        at: place of the line.
        meanings: wording -> presence or answer; an empty meaning takes the wording out.
        told: `unit`, `decimal`, `blank-means`, `separator`; an empty one takes the key out.
    """
    entry = dict(entries(text)[at].value)
    held = entry.get("choices") if isinstance(entry.get("choices"), Mapping) else None
    choice = dict((held or {}).get("values") or entry.get("choice") or {})
    choice = _changed(choice, meanings)
    separator = told.get("separator", (held or {}).get("separator") or "")
    entry.pop("choice", None), entry.pop("choices", None)
    if choice and separator:
        entry["choices"] = {"separator": separator, "values": choice}
    elif choice:
        entry["choice"] = choice
    number = entry.get("number")
    if isinstance(number, Mapping):
        number = {**number, **{k: told[k] for k in ("unit", "decimal") if told.get(k)}}
        entry["number"] = {k: v for k, v in number.items() if not (k == "decimal" and told.get(k) == "")}
    if "blank-means" in told:
        entry.pop("blank-means", None)
        if told["blank-means"]:
            entry["blank-means"] = told["blank-means"]
    return put_entry(text, _in_order(entry), at)


def put_qualifier_meanings(text: str, at: int, axis: str, meanings: Mapping[str, str]) -> str:
    """The text with what the wordings of a describing box mean."""
    entry = dict(entries(text)[at].value)
    qualifiers = dict(entry["qualifiers"])
    source = dict(qualifiers[axis])
    choice = _changed(dict(source.get("choice") or {}), meanings)
    source.pop("choice", None), source.pop("text", None)
    source |= {"choice": choice} if choice else {"text": "true"}
    qualifiers[axis] = source
    return put_entry(text, {**entry, "qualifiers": qualifiers}, at)


def _changed(held: dict[str, Any], meanings: Mapping[str, str]) -> dict[str, Any]:
    for wording, meaning in meanings.items():
        if not meaning:
            held.pop(wording, None)
        elif not isinstance(held.get(wording), Mapping):  # a longer meaning is changed in the text
            held[wording] = meaning
    return held


_ORDER: Final = ("finding", "instance", "section", "when", "field", "presence", "choice", "choices", "number",
                 "text", "findings", "qualifiers", "note", "time", "blank-means")  # fmt: skip


def _in_order(entry: Mapping[str, Any]) -> dict[str, Any]:
    return {key: entry[key] for key in _ORDER if key in entry}


def take_back(text: str, name: str) -> str:
    """The text without everything that a field is used for."""
    found: Uses = uses(text)
    for use in sorted(found.by_field.get(name, ()), key=lambda one: -(one.at or 0)):
        if use.kind == "ignored" and use.at is not None:
            text = drop_entry(text, use.at, "ignore")
        elif use.kind == "record":
            text = out_of_record(text, use.says, name)
    lines = {use.at for use in found.by_field.get(name, ()) if use.at is not None and use.kind != "ignored"}
    for at in sorted(lines, reverse=True):
        text = _out_of_line(text, at, name)
    return text


def _out_of_line(text: str, at: int, name: str) -> str:
    """A line goes when the field is its box, or decides whether it is read; else only what the field says."""
    entry = dict(entries(text)[at].value)
    if entry.get("note") == name:
        del entry["note"]
    qualifiers = {
        axis: source
        for axis, source in (entry.get("qualifiers") or {}).items()
        if source.get("field") != name
    }
    entry["qualifiers"] = qualifiers
    if isinstance(entry.get("time"), Mapping) and name in (
        entry["time"].get("field"), *(entry["time"].get("fields") or ())
    ):  # fmt: skip
        del entry["time"]
    if not qualifiers:
        del entry["qualifiers"]
    decides = isinstance(entry.get("when"), Mapping) and entry["when"].get("field") == name
    if entry.get("field") == name or decides or not entry.keys() - {"finding", "instance"}:
        return drop_entry(text, at)
    return put_entry(text, entry, at)


def target_words(target: Target) -> str:
    """What a field may mean, in words."""
    if target.finding == RECORD:
        return f"the record's {target.axis}"
    if target.axis:
        return f"{label(target.finding)}: {axis_label(target.axis).lower()}"
    return label(target.finding)
