"""What all lines of one map share, made once when the map is made ready."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

from fhirgallop.codes.units import UnitTable
from fhirgallop.exam.catalogue import Catalogue
from fhirgallop.exam.entry import Entry
from fhirgallop.exam.presence import Presence
from fhirgallop.mapping.boxes import Policy
from fhirgallop.mapping.marks import LineTime
from fhirgallop.mapping.record_reading import RecordReader
from fhirgallop.mapping.template_map import BlankMeans, Line, TemplateMap
from fhirgallop.mapping.wordings import Blanks

_BLANK_PRESENCE: Final = {"absent": Presence.ABSENT, "not-examined": Presence.NOT_EXAMINED}
# What the sender says of a single box in place of its value (HL7 v2 OBX-11 X and N).
TAKEN_OUT: Final = {"cancelled": Presence.NOT_EXAMINABLE, "not-asked": Presence.NOT_EXAMINED}


@dataclass(frozen=True, slots=True)
class Tools:
    """What all lines of one map share."""

    catalogue: Catalogue
    units: UnitTable
    blanks: Blanks
    policy: Policy
    record: RecordReader
    parts: dict[str, int]

    @classmethod
    def of(cls, template: TemplateMap, catalogue: Catalogue, units: UnitTable) -> Tools:
        """The tools for one map."""
        blanks = Blanks(template.blanks)
        parts: dict[str, int] = {}
        for line in template.lines:
            if line.number and line.number.split:
                parts[line.field] = max(parts.get(line.field, 0), line.number.part)
        policy = Policy(template.unknown_values == "keep-as-text", bool(template.local_system))
        return cls(catalogue, units, blanks, policy, RecordReader(template.record, blanks), parts)

    def line_time(self, line: Line) -> LineTime | None:
        """The reader of a line's own time; without a zone of its own, the examination's holds."""
        return LineTime(line.time, self.blanks, self.record.zone) if line.time else None


def when_blank(line: Line, finding: str, means: BlankMeans) -> Entry | None:
    """The entry that a blank box stands for, if it stands for one."""
    presence = _BLANK_PRESENCE.get(means)
    return Entry(finding, presence, instance=line.instance, fields=(line.field,)) if presence else None
