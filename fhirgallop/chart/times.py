"""When something was true: the clinically relevant time of a resource, exactly as precise as it was written.

Sources: FHIR R4 and R5 Observation.effective[x], Condition.onset[x], Procedure.performed[x] / occurrence[x].
The time of recording is no time of the patient's.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime
from typing import Any

from fhirgallop.chart.elements import Element, element, text, value_names
from fhirgallop.chart.log import Log
from fhirgallop.exam import moment


@dataclass(frozen=True, slots=True)
class Times:
    """Reads times against one moment of review; what lies after it is not read."""

    now: datetime
    log: Log

    def of(self, resource: Element, stem: str, place: str) -> str | None:
        """The time of a choice element such as `effective`: empty when unknown, None when in the future.

        A period counts from its start, so that it is never taken for newer than it is.
        """
        written = ""
        for name in value_names(resource, stem):
            written = _written(resource[name])
            if written:
                place = f"{place}.{name}"
                break
        return self.read(written, place)

    def read(self, written: str, place: str) -> str | None:
        """A dateTime: empty when it cannot be read, None when it lies in the future."""
        if not written:
            return ""
        parsed = moment.parse(written)
        if isinstance(parsed, str):
            # a time of day without a zone still names its day
            parsed = moment.parse(written[:10])
            words = "This time cannot be read whole; write it as FHIR dateTime, a time of day with its zone."
            self.log.add("warning", "value", "chart-time", words, place)
        if isinstance(parsed, str):
            return ""
        if self.is_future(parsed.start):
            words = "This time lies after the moment of review; nothing at this place is used. Correct it."
            self.log.add("warning", "business-rule", "chart-future", words, place)
            return None
        return parsed.start

    def is_future(self, time: str) -> bool:
        """True when a time that was read lies after the moment of review."""
        if len(time) <= 10:
            return time > self.now.isoformat()[: len(time)]
        return datetime.fromisoformat(time) > self.now


def _written(value: Any) -> str:
    if isinstance(value, str):
        return text(value)
    held = element(value)
    events = held.get("event")
    first = events[0] if isinstance(events, list) and events else ""
    return text(held.get("start")) or text(held.get("end")) or text(first)
