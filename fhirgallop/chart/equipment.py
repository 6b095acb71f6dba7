"""Devices and procedures as facts: what was put in or done, and whether it still is.

Sources: FHIR R4 Device, DeviceUseStatement, Procedure; R5 Device, DeviceUsage, DeviceAssociation, Procedure.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import Final

from fhirgallop.chart.elements import Element, code_words, codes, element, elements, text
from fhirgallop.chart.gather import Found
from fhirgallop.chart.known import known
from fhirgallop.chart.reading import Reading, grouped, modified
from fhirgallop.exam import catalogue
from fhirgallop.exam.context import Fact, Source, State
from fhirgallop.exam.entry import Qualifier

_PACING: Final = "pacing-mode"
# How a device's own status, and the statement that it is used, translate.
_DEVICE: Final = {
    "": State.PRESENT,
    "active": State.PRESENT,
    "inactive": State.HISTORY,
    "entered-in-error": State.REFUTED,
}
_USE: Final = {
    "active": State.PRESENT,
    "on-hold": State.PRESENT,
    "implanted": State.PRESENT,
    "attached": State.PRESENT,
    "completed": State.HISTORY,
    "stopped": State.HISTORY,
    "explanted": State.HISTORY,
    "entered-in-error": State.REFUTED,
}
_PROCEDURE: Final = {
    "completed": State.PRESENT,
    "in-progress": State.PRESENT,
    "entered-in-error": State.REFUTED,
    "preparation": State.UNCERTAIN,
    "on-hold": State.UNCERTAIN,
    "stopped": State.UNCERTAIN,
    "unknown": State.UNCERTAIN,
}
# These last as long as they are done; when they are completed, they are over.
_WHILE_DONE: Final = frozenset({"procedure.mechanical-ventilation"})


def read_devices(devices: Iterable[Found], uses: Iterable[Found], reading: Reading) -> None:
    """Adds the patient's devices; a statement of a device's use goes before the device's own status."""
    stated: set[int] = set()
    for use in uses:
        if modified(use.resource):
            _refuse(use, reading)
            continue
        target = reading.resolve(use.resource.get("device"), use)
        if target is not None:
            stated.add(id(target.resource))
            if reading.whose.owns(target) is False:
                words = "The device is another patient's; nothing of it is used."
                reading.log.add("error", "business-rule", "chart-other-patient", words, use.place)
                continue
        concept = element(use.resource.get("device")).get("concept")
        holder = target.resource if target is not None else {"type": concept}
        status = use.resource.get("status")
        word = next(iter(code_words(status)), "") if isinstance(status, dict) else text(status)
        if word == "not-done":
            continue
        _device(holder, _USE.get(word, State.UNCERTAIN), use, "timing", reading)
    for device in devices:
        if id(device.resource) not in stated and device.resource:
            if modified(device.resource):
                _refuse(device, reading)
                continue
            state = _DEVICE.get(text(device.resource.get("status")), State.UNCERTAIN)
            _device(device.resource, state, device, "", reading)


def _refuse(found: Found, reading: Reading) -> None:
    words = "An extension may turn the meaning of this round; nothing of it is used."
    reading.log.add("warning", "not-supported", "chart-modifier", words, found.place)


def _device(device: Element, state: State, found: Found, stem: str, reading: Reading) -> None:
    said = grouped(reading.statements("device", codes(device.get("type"))))
    if not said:
        reading.unknown += 1
        return
    time = reading.times.of(found.resource, stem, found.place) if stem else ""
    if time is None:
        return
    for statement in said.values():
        definition = known()[statement.id]
        described = [
            *statement.qualifiers,
            *reading.qualifiers(definition, codes(found.resource.get("bodySite"))),
        ]
        if _PACING in definition.qualifiers:
            described += _pacing(device, reading)
        if state in (State.HISTORY, State.REFUTED, State.UNCERTAIN) or statement.present:
            reading.facts.append(
                Fact(
                    statement.id,
                    state,
                    Source.DEVICE,
                    statement.answers,
                    qualifiers=tuple(dict.fromkeys(described)),
                    time=time,
                    reference=found.name,
                )
            )


def _pacing(device: Element, reading: Reading) -> list[Qualifier]:
    """The pacing mode among the properties of a pacemaker: by code, or by its letters as text (DDDR)."""
    modes = catalogue.load().axes[_PACING].values
    for prop in elements(device.get("property")):
        for name in ("valueCode", "valueCodeableConcept", "valueString"):  # R4, R5
            value = prop.get(name)
            for concept in elements(value) if not isinstance(value, str) else ({"text": value},):
                for code in codes(concept):
                    found = reading.tables.axis_values.get((_PACING, code))
                    if found:
                        return [Qualifier(_PACING, found)]
                # the fourth letter, R, only says that the rate adapts
                letters = text(concept.get("text")).lower().removesuffix("r")
                if letters in modes:
                    return [Qualifier(_PACING, letters)]
    return []


def read_procedure(found: Found, reading: Reading) -> None:
    """Adds what was done; that something was not done on one day says nothing of other days."""
    procedure = found.resource
    said = grouped(reading.statements("procedure", codes(procedure.get("code"))))
    if not said:
        reading.unknown += 1
        return
    if modified(procedure):
        _refuse(found, reading)
        return
    state = _PROCEDURE.get(text(procedure.get("status")))
    if state is None:
        words = "Only what was done is read; this status says something else."
        reading.log.add("information", "business-rule", "chart-status", words, found.place)
        return
    stem = (
        "occurrence"
        if any(name.startswith("occurrence") for name in procedure if isinstance(name, str))
        else "performed"
    )
    time = reading.times.of(procedure, stem, found.place)
    if time is None:
        return
    for statement in said.values():
        over = statement.id in _WHILE_DONE and procedure.get("status") == "completed"
        definition = known()[statement.id]
        described = reading.qualifiers(definition, codes(procedure.get("bodySite")))
        reading.facts.append(
            Fact(
                statement.id,
                State.HISTORY if over else state,
                Source.PROCEDURE,
                statement.answers,
                qualifiers=tuple(dict.fromkeys((*statement.qualifiers, *described))),
                time=time,
                encounter=reading.encounter(found),
                reference=found.name,
            )
        )
