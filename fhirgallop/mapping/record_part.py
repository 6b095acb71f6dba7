"""Reads the `record` part of a map: patient, identifier, time, encounter, examiner, status."""

from __future__ import annotations

from fhirgallop.exam.moment import Moment
from fhirgallop.exam.moment import parse as parse_moment
from fhirgallop.mapping import clock
from fhirgallop.mapping.document import Items, Node, Pairs, Scalar, clip
from fhirgallop.mapping.faults import Faults
from fhirgallop.mapping.template_map import (
    IdentifierSource,
    PartySource,
    RecordPart,
    StatusSource,
    TimeSource,
)


def text(group: Pairs, key: str, default: str = "") -> str:
    """The text of a key of a group that conforms to the grammar."""
    node = group.get(key)
    return node.text if isinstance(node, Scalar) else default


def texts(node: Node | None) -> tuple[str, ...]:
    """The texts of a list that conforms to the grammar."""
    return (
        tuple(item.text for item in node.items if isinstance(item, Scalar)) if isinstance(node, Items) else ()
    )


def record_part(node: Node | None, faults: Faults) -> RecordPart | None:
    """The record part, or None where patient, identifier or time cannot be made out."""
    if not isinstance(node, Pairs):
        return None
    patient, identifier, time = (
        _party(node, "patient", faults),
        _identifier(node, faults),
        time_source(node.get("time"), faults),
    )
    encounter, examiner = _party(node, "encounter", faults), _party(node, "examiner", faults)
    if patient is None or identifier is None or time is None:
        return None
    return RecordPart(patient, identifier, time, encounter, examiner, _status(node))


def _party(record: Pairs, key: str, faults: Faults) -> PartySource | None:
    node = record.get(key)
    if not isinstance(node, Pairs):
        return None
    source = PartySource(
        text(node, "field"), text(node, "system"), text(node, "fhir-id") == "true", node.line
    )
    if source.system and source.is_fhir_id:
        words = f"{key} has a system and fhir-id; a FHIR id has no system: keep one of the two."
        faults.add(node.line, "map-contradictory-keys", words)
    return source


def _fields(node: Pairs, name: str, faults: Faults) -> tuple[str, ...]:
    one, several = text(node, "field"), texts(node.get("fields"))
    if one and several:
        faults.add(node.line, "map-contradictory-keys", f"{name} has field and fields; keep one of the two.")
    return (one,) if one else several


def _identifier(record: Pairs, faults: Faults) -> IdentifierSource | None:
    node = record.get("identifier")
    if not isinstance(node, Pairs):
        return None
    return IdentifierSource(_fields(node, "identifier", faults), text(node, "system"), node.line)


def time_source(node: Node | None, faults: Faults) -> TimeSource | None:
    """A time of the record, or of a line."""
    if not isinstance(node, Pairs):
        return None
    zone, form = text(node, "zone"), text(node, "format")
    fields = _fields(node, "time", faults)
    if zone and not clock.zone_is_known(zone):
        words = (
            f"zone {clip(zone)} is not known; write Z, an offset such as +01:00, or a name of the time zone "
            "database such as Europe/Vienna."
        )
        faults.add(node.line, "map-unknown-zone", words, code="code-invalid")
    if form and isinstance(pattern := clock.written_form(form), str):
        faults.add(node.line, "map-time-format", f"format cannot be used: {pattern}.", code="value")
    constant = _constant(node, zone, faults)
    if constant and fields:
        faults.add(
            node.line, "map-contradictory-keys", "time has a constant and a field; keep one of the two."
        )
    return TimeSource(fields, zone, form, _periods(node, faults), constant, node.line)


def _constant(node: Pairs, zone: str, faults: Faults) -> Moment | None:
    written = text(node, "constant")
    if not written:
        return None
    moment = clock.read(written, zone if clock.zone_is_known(zone) else "", None)
    if isinstance(moment, str):
        faults.add(
            node.line, "map-time-constant", f"The constant time cannot be used: {moment}.", code="value"
        )
        return None
    return moment


def _periods(node: Pairs, faults: Faults) -> dict[str, Moment]:
    periods = node.get("periods")
    found: dict[str, Moment] = {}
    if not isinstance(periods, Pairs):
        return found
    if not (text(node, "field") or texts(node.get("fields"))):
        faults.add(
            periods.line,
            "map-missing-key",
            "periods need the field whose wordings they explain; add field.",
            code="required",
        )
    for key, span in periods.items:
        start, end = (*texts(span), "", "")[:2]
        wrong = [day for day in (start, end) if "T" in day or isinstance(parse_moment(day), str)]
        if wrong or start > end:
            words = (
                f"The period {clip(key.text)} needs two days, months or years, the earlier "
                "first: [2014-07, 2014-08]."
            )
            faults.add(key.line, "map-form", words, code="value")
        else:
            found[key.text] = Moment(start, end)
    return found


def _status(record: Pairs) -> StatusSource | None:
    node = record.get("status")
    choice = node.get("choice") if isinstance(node, Pairs) else None
    if not isinstance(node, Pairs) or not isinstance(choice, Pairs):
        return None
    meanings = {key.text: value.text for key, value in choice.items if isinstance(value, Scalar)}
    return StatusSource(text(node, "field"), meanings, node.line)  # type: ignore[arg-type]
