"""What all readers of resources share: the chart around a resource, and the facts found so far."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

from fhirgallop.chart.elements import Code, Element, element, elements, identifiers, reference, text
from fhirgallop.chart.gather import Found
from fhirgallop.chart.known import Known
from fhirgallop.chart.log import Log
from fhirgallop.chart.tables import Statement, Tables
from fhirgallop.chart.times import Times
from fhirgallop.chart.whose import Whose
from fhirgallop.codes import systems
from fhirgallop.exam.context import Fact, Source
from fhirgallop.exam.entry import Qualifier
from fhirgallop.exam.exam import Exam


@dataclass
class Reading:
    """One chart while it is read.

    Attributes:
        tables: what codes say.
        whose: the patient's names.
        exam: today's examination, to whose encounter the chart's are compared.
        times: reads times against the moment of review.
        log: what was noticed.
        places: every resource by the references that may point at it.
        facts: found so far.
        unknown: resources whose codes nobody here knows.
    """

    tables: Tables
    whose: Whose
    exam: Exam
    times: Times
    log: Log
    places: Mapping[str, Found]
    facts: list[Fact] = field(default_factory=list)
    unknown: int = 0

    def resolve(self, value: Any, found: Found) -> Found | None:
        """The resource a Reference points at; None, with an issue, where the chart does not hold it."""
        literal = reference(value).partition("/_history/")[0]
        if literal.startswith("#"):
            for inner in elements(found.resource.get("contained")):
                if text(inner.get("id")) == literal[1:]:
                    return Found(text(inner.get("resourceType")), inner, found.place, "")
        target = self._at(literal, found)
        if target is None and literal:
            words = "The reference points at nothing in this chart; what stands there stays unknown."
            self.log.add("information", "not-found", "chart-reference", words, found.place)
        return target

    def _at(self, literal: str, found: Found) -> Found | None:
        """The resource at a full address, or at a relative one on the server of `found`."""
        if found.base and ":" not in literal:
            target = self.places.get(f"{found.base}/{literal}") or self.places.get(literal)
            return target if target is not None and target.base in ("", found.base) else None
        return self.places.get(literal)

    def encounter(self, found: Found) -> str:
        """The encounter of a resource, comparable with the examination's; empty when unknown."""
        held = element(found.resource.get("encounter"))
        if not held:
            return ""
        ours = self.exam.encounter
        logical = identifiers(held.get("identifier"))
        literal = reference(held).partition("/_history/")[0]
        if ours is not None and not ours.is_fhir_id:
            if not logical and literal:
                target = self._at(literal, found)
                logical = identifiers(target.resource.get("identifier")) if target else frozenset()
            if (ours.system, ours.value) in logical:
                return ours.value
            # an encounter without the examination's kind of number may be the same one or another
            return literal or "another" if any(system == ours.system for system, _ in logical) else ""
        return literal.rpartition("/")[2] if literal else ""

    def statements(self, use: str, found: Iterable[Code]) -> list[Statement]:
        """What codes say in a use; our own code alone where there is one, for it says it exactly."""
        codings = tuple(found)
        table = self.tables.uses[use]
        own = [s for code in codings if code.system == systems.FINDINGS for s in table.get(code, ())]
        return own or [s for code in codings for s in table.get(code, ())]

    def source(self, kind: str, by: str, found: Iterable[Code]) -> Source | None:
        """The first source the table names for one of the codes."""
        table = self.tables.sources.get((kind, by), {})
        return next((table[code] for code in found if code in table), None)

    def qualifiers(self, known: Known, *concepts: tuple[Code, ...]) -> list[Qualifier]:
        """Properties of `known` that the codes name, whatever their axis."""
        found = {}
        for axis in sorted(known.qualifiers):
            for code in (code for concept in concepts for code in concept):
                value = self.tables.axis_values.get((axis, code))
                # what the finding itself fixes (heard by auscultation) is no property of this one
                if value is not None and (axis, value) != ("method", known.method):
                    found[axis, value] = Qualifier(axis, value)
        return list(found.values())


def by_place(chart: Iterable[Found]) -> dict[str, Found]:
    """Resources by their full address and, where they have one, by `Type/id`."""
    places: dict[str, Found] = {}
    for found in chart:
        if found.url:
            places.setdefault(found.url, found)
        if found.id:
            places.setdefault(found.name, found)
    return places


def modified(holder: Element) -> bool:
    """True when an extension may turn the meaning round; such an element must not be read (FHIR R4)."""
    return bool(holder.get("modifierExtension") or holder.get("implicitRules"))


def grouped(statements: Iterable[Statement]) -> dict[str, Statement]:
    """One statement an id: answers and properties of all its codes together, the vague ones left out.

    An id that one code says is present and another says is absent is not read at all.
    """
    found: dict[str, Statement] = {}
    torn: set[str] = set()
    for one in statements:
        other = found.get(one.id)
        if other is None:
            found[one.id] = one
            continue
        if other.present is not one.present:
            torn.add(one.id)
        answers = tuple(dict.fromkeys((*other.answers, *one.answers)))
        answers = tuple(a for a in answers if a != "undetermined") or answers
        qualifiers = tuple(dict.fromkeys((*other.qualifiers, *one.qualifiers)))
        contextual = other.contextual or one.contextual
        found[one.id] = Statement(one.id, answers, qualifiers, one.present, contextual)
    # what is said of a kind is not said again of its parent
    return {
        id_: one
        for id_, one in found.items()
        if id_ not in torn and not any(other.startswith(f"{id_}.") for other in found)
    }
