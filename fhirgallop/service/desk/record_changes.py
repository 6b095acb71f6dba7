"""A field as a part of the record: whose examination it is, which one, when, and how far it has got."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from typing import Any, Final

from fhirgallop.mapping.editing import part, put_part
from fhirgallop.service.desk.brought import FieldSeen

_SYSTEMS: Final = {
    "patient": "patients",
    "identifier": "examinations",
    "encounter": "visits",
    "examiner": "staff",
}
_STATUSES: Final = ("final", "preliminary", "amended", "corrected", "entered-in-error")
_DATES: Final = (
    (r"[0-9]{1,2}\.[0-9]{1,2}\.[0-9]{4}", "DD.MM.YYYY"),
    (r"[0-9]{4}/[0-9]{1,2}/[0-9]{1,2}", "YYYY/MM/DD"),
    (r"[0-9]{1,2}-[0-9]{1,2}-[0-9]{4}", "DD-MM-YYYY"),
    (r"[0-9]{8}", "YYYYMMDD"),
)


class TakenError(Exception):
    """Another field is this part of the record already; the text is the part."""


def put_record(text: str, field: FieldSeen, what: str, *, address: str, zone: str) -> str:
    """The text with a field as a part of the record; a second one of time or number joins the first.

    Args:
        text: the map.
        field: the field.
        what: patient, identifier, time, encounter, examiner or status.
        address: where the clinic's numbers belong.
        zone: zone of times without one.

    Raises:
        MapError: the text cannot be read.
        TakenError: another field is this part already.
    """
    held = part(text, "record")
    if what not in ("time", "identifier") and isinstance(held, Mapping) and "field" in (held.get(what) or ()):
        raise TakenError(what)
    old = held.get(what) if isinstance(held, Mapping) else None
    old = dict(old) if isinstance(old, Mapping) else {}
    joined = [*(old.get("fields") or ([old["field"]] if old.get("field") else [])), field.name]
    if what == "status":
        choice = {v: s for v in field.values for s in [_status(field.labels.get(v, v))] if s}
        made: dict[str, Any] = {"field": field.name, "choice": choice}
    elif what == "time":
        made = _time(old, joined, field, zone)
    elif what == "identifier":
        named = {"field": joined[0]} if len(joined) == 1 else {"fields": list(dict.fromkeys(joined))}
        made = {**named, "system": old.get("system") or f"{address}/{_SYSTEMS[what]}"}
    else:
        made = {"field": field.name, "system": old.get("system") or f"{address}/{_SYSTEMS[what]}"}
    return put_part(text, what, made, within="record")


def _time(old: Mapping[str, Any], joined: list[str], field: FieldSeen, zone: str) -> dict[str, Any]:
    made: dict[str, Any] = (
        {"field": joined[0]} if len(joined) == 1 else {"fields": list(dict.fromkeys(joined))}
    )
    form = old.get("format") or _written_form(field.values)
    if form:
        made["format"] = form
    if zone:
        made["zone"] = old.get("zone") or zone
    return made


def _written_form(values: Iterable[str]) -> str:
    """The written form that all values share; empty for ISO 8601, and where they share none."""
    seen = [value.strip() for value in values]
    for pattern, form in _DATES:
        for clock, more in (
            ("", ""),
            (r" [0-9]{1,2}:[0-9]{2}", " hh:mm"),
            (r" [0-9]{1,2}:[0-9]{2}:[0-9]{2}", " hh:mm:ss"),
        ):
            if seen and all(re.fullmatch(pattern + clock, value) for value in seen):
                return form + more
    return ""


def _status(value: str) -> str:
    words = value.strip().casefold()
    if words in _STATUSES:
        return words
    if words in {"signed", "complete", "completed", "done"}:
        return "final"
    return "preliminary" if words in {"draft", "open", "unsigned", "in progress"} else ""


def out_of_record(text: str, what: str, name: str) -> str:
    """The text in which a field is no part of the record any more."""
    held = dict(part(text, "record")[what])
    rest = [one for one in held.pop("fields", None) or [] if one != name]
    held.pop("field", None)
    if not rest:
        return put_part(text, what, None, within="record")
    named: dict[str, Any] = {"field": rest[0]} if len(rest) == 1 else {"fields": rest}
    return put_part(text, what, {**named, **held}, within="record")
