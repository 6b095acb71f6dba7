"""What an Observation, or a component of one, says of a sign: a code alone never makes it present.

The negative reader looks at value, dataAbsentReason and interpretation before it counts anything. Sources:
FHIR R4 Observation 10.1.4.4.3 (patterns of code and value), 10.1.4.6 (absent values); v3
ObservationInterpretation.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

from fhirgallop.chart.elements import Code, Element, code_words, codes, value_names
from fhirgallop.chart.reading import Reading
from fhirgallop.exam.context import State
from fhirgallop.exam.entry import Qualifier

_AFFIRMING: Final = frozenset({"POS", "DET"})
_DENYING: Final = frozenset({"NEG", "ND"})
_STATES: Final = {"present": State.PRESENT, "absent": State.ABSENT, "uncertain": State.UNCERTAIN}
_SEVERITY: Final = "severity"


@dataclass(frozen=True, slots=True)
class Said:
    """What was said: the state, the severity where the value is one, and the codes of the value."""

    state: State
    qualifiers: tuple[Qualifier, ...] = ()
    value: tuple[Code, ...] = ()


def presence(holder: Element, reading: Reading, place: str) -> Said | None:
    """Present, absent or uncertain; None where nothing was said that can be used."""
    names = value_names(holder)
    if holder.get("dataAbsentReason") is not None:
        if names:
            words = "A value and a reason why there is none stand side by side; neither is used."
            reading.log.add("warning", "invariant", "obs-6", words, place)
        return None
    affirmed, denied = _interpreted(holder)
    if affirmed and denied:
        return _nothing(reading, "The interpretations contradict each other; nothing is used.", place)
    if not names:
        if affirmed or denied:
            return Said(State.PRESENT if affirmed else State.ABSENT)
        words = "A code without a value does not say that the finding is present; it is not used."
        return _nothing(reading, words, place)
    if len(names) > 1:
        return _nothing(reading, "Several values stand at one place; none is used.", place)
    said = _valued(names[0], holder, reading, place)
    if said is not None and (
        (said.state is State.PRESENT and denied) or (said.state is State.ABSENT and affirmed)
    ):
        return _nothing(reading, "Value and interpretation contradict each other; neither is used.", place)
    return said


def _interpreted(holder: Element) -> tuple[bool, bool]:
    words = code_words(holder.get("interpretation"))
    return not words.isdisjoint(_AFFIRMING), not words.isdisjoint(_DENYING)


def _valued(name: str, holder: Element, reading: Reading, place: str) -> Said | None:
    value = holder[name]
    if name == "valueBoolean" and isinstance(value, bool):
        return Said(State.PRESENT if value else State.ABSENT)
    if name == "valueCodeableConcept":
        found = codes(value)
        states = {reading.tables.presence[code] for code in found if code in reading.tables.presence}
        if len(states) > 1:
            return _nothing(reading, "The codes of the value contradict each other; none is used.", place)
        if states:
            # not examined, not examinable: nobody looked, and nothing follows
            state = _STATES.get(states.pop())
            return Said(state) if state else None
        axis_values = reading.tables.axis_values
        grades = [axis_values[_SEVERITY, code] for code in found if (_SEVERITY, code) in axis_values]
        if grades:
            return Said(State.PRESENT, (Qualifier(_SEVERITY, grades[0]),))
        if found:
            return Said(State.PRESENT, value=found)
    words = "The value does not say present or absent in a way that is known here; it is not used."
    return _nothing(reading, words, place)


def _nothing(reading: Reading, words: str, place: str) -> Said | None:
    reading.log.add("information", "not-supported", "chart-value", words, place)
    return None
