"""Moments that a map names: the examination's, and those of single boxes."""

from __future__ import annotations

import re

from fhirgallop.exam.moment import Moment
from fhirgallop.mapping import clock
from fhirgallop.mapping.run import Run
from fhirgallop.mapping.template_map import TimeSource
from fhirgallop.mapping.wordings import Blanks, wordings


def single(run: Run, blanks: Blanks, name: str) -> str:
    """The one text of a field; empty where it is blank, with an issue where it holds several."""
    values = blanks.filled(run.fields.get(name))
    if len(values) > 1:
        words = "The field holds several values where one is needed; send one."
        run.issue("error", "value", "map-several-values", words, name)
    return wordings(values[0])[0].strip() if values else ""


class WrittenTime:
    """How one `time` of a map is read; `zone` holds where it names none of its own."""

    def __init__(self, source: TimeSource, zone: str = "") -> None:
        self.zone = source.zone or zone
        form = clock.written_form(source.format) if source.format else None
        self._form = form if isinstance(form, re.Pattern) else None

    def moment(self, run: Run, written: str, name: str, *, as_stated: bool = True) -> Moment | None:
        """The moment written, in the stated form or ISO 8601; None, with an issue, where it is none."""
        moment = clock.read(written, self.zone, self._form if as_stated else None)
        if isinstance(moment, Moment):
            return moment
        rule = "map-time-without-zone" if "needs a zone" in moment else "map-time-unreadable"
        run.issue("error", "value", rule, f"The time cannot be used: {moment}.", name)
        return None
