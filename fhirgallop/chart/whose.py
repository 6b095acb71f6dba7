"""Whose a resource is: nothing of another patient is ever used.

A resource is the patient's only where that can be followed: by logical id on the same server, by full
address, or by a business identifier. Sources: FHIR R4 "References" (relative, absolute, versioned, contained,
logical) and "Resolving references in Bundles".
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

from fhirgallop.chart.elements import Element, element, elements, identifiers, reference, text
from fhirgallop.chart.gather import Found
from fhirgallop.chart.log import Log
from fhirgallop.exam.exam import Party

_SUBJECTS: Final = {"Device": "patient", "DeviceUsage": "patient"}


@dataclass(frozen=True, slots=True)
class Whose:
    """The names under which the patient goes in this chart.

    Attributes:
        party: the patient of the examination.
        patient: the patient's own resource, where the chart has it.
        ids: logical ids, for relative references.
        urls: full addresses.
        base: address of the server, where the chart tells one.
    """

    party: Party
    patient: Found | None
    ids: frozenset[str]
    urls: frozenset[str]
    base: str

    def owns(self, found: Found) -> bool | None:
        """True when it is the patient's, False when it is another's, None when it names nobody."""
        if found.type == "Patient":
            return found is self.patient
        subject = found.resource.get(_SUBJECTS.get(found.type, "subject"))
        return self.means(element(subject), found)

    def means(self, subject: Element, found: Found) -> bool | None:
        """The same of a Reference that stands in `found`."""
        literal = reference(subject)
        if literal:
            return self._literal(literal, found)
        logical = identifiers(subject.get("identifier"))
        return self._identified(logical) if logical else None

    def _literal(self, literal: str, found: Found) -> bool:
        if literal.startswith("#"):
            return any(
                text(inner.get("id")) == literal[1:]
                and self._identified(identifiers(inner.get("identifier")))
                for inner in elements(found.resource.get("contained"))
            )
        literal = literal.partition("/_history/")[0]
        if ":" in literal:
            return literal in self.urls
        kind, _, id_ = literal.partition("/")
        if kind != "Patient" or id_ not in self.ids:
            return False
        # a relative reference is meant on the server of the resource it stands in
        return not (found.base and self.base) or found.base == self.base

    def _identified(self, logical: frozenset[tuple[str, str]]) -> bool:
        known = {(self.party.system, self.party.value)} if not self.party.is_fhir_id else set()
        if self.patient is not None:
            known |= identifiers(self.patient.resource.get("identifier"))
        return not logical.isdisjoint(known)


def recognise(party: Party, chart: Sequence[Found], base: str, log: Log) -> Whose:
    """Finds the patient among the resources.

    Args:
        party: the patient of the examination.
        chart: every resource.
        base: address of the server the chart comes from; empty when unknown.
        log: takes what is wrong.
    """
    bases = {found.base for found in chart if found.base}
    base = base.rstrip("/") or (next(iter(bases)) if len(bases) == 1 else "")
    patients = [found for found in chart if found.type == "Patient"]
    ours = [found for found in patients if _is(found, party, base)]
    if len(ours) > 1:
        log.add(
            "warning",
            "duplicate",
            "chart-two-patients",
            "Two Patient resources are this patient; the first is used.",
        )
    for found in patients:
        if found not in ours:
            words = "This is another patient than the examination's; nothing of that patient is used."
            log.add("error", "business-rule", "chart-other-patient", words, found.place)
    patient = ours[0] if ours else None
    ids = {found.id for found in ours if found.id}
    if party.is_fhir_id:
        ids.add(party.value)
    urls = {found.url for found in ours if found.url}
    urls |= {
        f"{found.base or base}/Patient/{found.id}" for found in ours if found.id and (found.base or base)
    }
    if party.is_fhir_id and base:
        urls.add(f"{base}/Patient/{party.value}")
    return Whose(
        party, patient, frozenset(ids), frozenset(urls), patient.base if patient and patient.base else base
    )


def _is(found: Found, party: Party, base: str) -> bool:
    if party.is_fhir_id:
        return found.id == party.value and (not base or not found.base or found.base == base)
    return (party.system, party.value) in identifiers(found.resource.get("identifier"))
