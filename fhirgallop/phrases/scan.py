"""What stands beside a name, read from left to right: answers, qualifiers, where it goes, how it responds."""

from __future__ import annotations

from typing import Final

from fhirgallop.exam.catalogue import FindingDefinition
from fhirgallop.exam.entry import Qualifier
from fhirgallop.phrases.items import Item

# `does not radiate to the axilla` says where not, which no qualifier can say.
_NOWHERE: Final = "nowhere"


class Scan:
    """Reads the values beside a name from left to right."""

    def __init__(
        self, findings: list[FindingDefinition], answers: dict[str, list[str]], qualifiers: list[Qualifier]
    ) -> None:
        self._findings = findings
        self._answers = answers
        self._qualifiers = qualifiers
        self._where: Item | None = None
        self._way: Item | None = None
        self._way_used = False

    def item(self, item: Item) -> None:
        """Takes one item, if one of the findings has a place for it."""
        plain = item.sense.plain
        if item.grade is not None:
            if self._takes("grade"):
                self._qualifiers.append(Qualifier("grade", grade=item.grade))
                item.used = True
            return
        if "manoeuvre" in plain and self._way is not None:
            self._response(item)
            return
        if "way" in plain:
            self.end()
            self._way, self._way_used, self._where = item, False, None
            return
        if "where" in plain:
            self._where = item
            return
        if item.sense.values:
            self._value(item)

    def end(self) -> None:
        """A way without a manoeuvre: `unchanged` says something by itself."""
        way = self._way
        self._way = None
        if way is None or self._way_used or way.plain("way") != "unchanged" or not self._takes("change"):
            return
        self._qualifiers.append(Qualifier("change", "unchanged"))
        way.used = True

    def _response(self, item: Item) -> None:
        assert self._way is not None  # noqa: S101 - item() asks first
        way = self._way.plain("way")
        kind = "movement" if way in ("earlier", "later") else "response"
        axis = f"{kind}.{item.plain('manoeuvre')}"
        if self._takes(axis):
            self._qualifiers.append(Qualifier(axis, way))
            item.used = self._way.used = self._way_used = True

    def _value(self, item: Item) -> None:
        where = self._where.plain("where") if self._where is not None else ""
        for axis, value in item.sense.values:
            if where and axis == where and self._takes(axis):
                self._qualifiers.append(Qualifier(axis, value))
                item.used = True
                if self._where is not None:
                    self._where.used = True
                return
        if where and not self._takes(where) and any(axis == where for axis, _ in item.sense.values):
            return
        if where == _NOWHERE and any(axis == "radiation" for axis, _ in item.sense.values):
            return
        if where:
            self._where = None
        for axis, value in item.sense.values:
            owner = next((one for one in self._findings if one.answers == axis), None)
            if owner is not None:
                self._answers.setdefault(owner.id, []).append(value)
                item.used = True
                return
        for axis, value in item.sense.values:
            if self._is_plain(axis, value) and self._takes(axis):
                self._qualifiers.append(Qualifier(axis, value))
                item.used = True
                return

    def _is_plain(self, axis: str, value: str) -> bool:
        """Radiation, the loudest place and a suspected lesion are only said after words that say so."""
        return axis not in ("radiation", "loudest-site", "suspected-lesion") or value == "none"

    def _takes(self, axis: str) -> bool:
        return any(axis in one.qualifiers for one in self._findings)
