"""The constant parts of Observations, made once for each finding and shared by every Observation of it.

What is shared is never changed after it was made: treat every dictionary that comes from here as read-only.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from functools import lru_cache
from typing import Any, Final

from fhirgallop.codes import systems, units
from fhirgallop.codes.coding import Coding
from fhirgallop.exam.catalogue import AxisValue, Catalogue, FindingDefinition
from fhirgallop.exam.entry import Grade, Qualifier
from fhirgallop.exam.presence import Presence
from fhirgallop.observations import absence, text

_CATEGORY_DISPLAY: Final = {
    "exam": "Exam",
    "vital-signs": "Vital Signs",
    "survey": "Survey",
    "procedure": "Procedure",
    "imaging": "Imaging",
}
_PROFILE_OF_KIND: Final = {
    "sign": "exam-finding",
    "choice": "exam-answer",
    "quantity": "exam-measurement",
    "text": "exam-remark",
    "panel": "exam-panel",
}
_METHOD_AXIS: Final = "method"
SITE_AXIS: Final = "site"
_MURMUR: Final = "murmur"
_BMI: Final = "vital.bmi"
_PRESENCE_AXIS: Final = "presence"


@dataclass(frozen=True, slots=True)
class Frame:
    """What all Observations of one finding have in common."""

    definition: FindingDefinition
    label: str
    meta: dict[str, Any]
    category: list[dict[str, Any]]
    code: dict[str, Any]
    code_unless_present: dict[str, Any]
    method: dict[str, Any] | None
    body_site: dict[str, Any] | None
    unit: dict[str, str]
    sites_are_components: bool


@dataclass(frozen=True, slots=True)
class Said:
    """A coded value, its words for the narrative (escaped), and the interpretation that goes with it."""

    concept: dict[str, Any]
    words: str
    interpretation: str = ""


class Fragments:
    """Constant parts for one catalogue, with SNOMED CT codings or without."""

    def __init__(self, catalogue: Catalogue, *, snomed: bool) -> None:
        self._catalogue = catalogue
        self._snomed = snomed
        self.frames = {id_: self._frame(definition) for id_, definition in catalogue.findings.items()}
        presence = catalogue.axes[_PRESENCE_AXIS].values
        self.presence = {p: self._said(presence[p]) for p in Presence}
        self.presence_coding = {p: presence[p].codings[-1].as_fhir() for p in Presence}
        self.answers = {
            (axis.id, value.id): self._said(value)
            for axis in catalogue.axes.values()
            for value in axis.values.values()
        }
        self._component_codes = {
            axis.id: self.concept(axis.codings, axis.label) for axis in catalogue.axes.values()
        }
        self.component = lru_cache(maxsize=4096)(self._component)

    def concept(self, codings: Iterable[Coding], label: str) -> dict[str, Any]:
        """CodeableConcept of the codings in use; the text always says exactly what is meant."""
        used = [c.as_fhir() for c in codings if self._snomed or c.system != systems.SNOMED]
        return {"coding": used, "text": label}

    def _said(self, value: AxisValue) -> Said:
        return Said(self.concept(value.codings, value.label), text.escaped(value.label), value.interpretation)

    def _frame(self, definition: FindingDefinition) -> Frame:
        vital = definition.category == "vital-signs"
        profile = "vital-sign" if vital else _PROFILE_OF_KIND[definition.kind]
        category = {
            "system": systems.OBSERVATION_CATEGORY,
            "code": definition.category,
            "display": _CATEGORY_DISPLAY[definition.category],
        }
        unit = units.table().by_code.get(definition.unit)
        return Frame(
            definition,
            text.escaped(definition.label),
            {"profile": [systems.profile(profile)]},
            [{"coding": [category]}],
            self.concept(definition.codings, definition.label),
            self.concept(_true_when_not_present(definition), definition.label),
            self._fixed(_METHOD_AXIS, definition.method),
            self._fixed(SITE_AXIS, definition.site),
            {"unit": unit.printed, "system": systems.UCUM, "code": unit.code} if unit else {},
            # the place of a murmur is a LOINC component, the place of anything else its bodySite
            _MURMUR in (definition.id, definition.parent),
        )

    def _fixed(self, axis: str, value: str) -> dict[str, Any] | None:
        if not value:
            return None
        known = self._catalogue.axes[axis].values[value]
        return self.concept(known.codings, known.label)

    def _component(self, qualifier: Qualifier) -> tuple[dict[str, Any], str]:
        """Component of a qualifier, and its escaped words for the narrative."""
        label = self._catalogue.axes[qualifier.axis].label
        if qualifier.grade:
            value, words = self._grade(qualifier.axis, qualifier.grade)
        elif qualifier.value:
            said = self.answers[qualifier.axis, qualifier.value]
            value, words = said.concept, said.words
        else:
            own_words = text.plain(qualifier.text)
            value, words = {"text": own_words}, text.escaped(own_words)
        component: dict[str, Any] = {"code": self._component_codes[qualifier.axis]}
        known = qualifier.value and self._catalogue.axes[qualifier.axis].values[qualifier.value]
        if known and known.id == "not-done":
            component["dataAbsentReason"] = absence.not_performed(known.label)
        else:
            component["valueCodeableConcept"] = value
        return component, f"{text.escaped(label)}: {words}"

    def _grade(self, axis: str, grade: Grade) -> tuple[dict[str, Any], str]:
        code, words = grade_code(axis, grade), str(grade)
        coding = {"system": systems.QUALIFIERS, "code": code, "display": f"Grade {words}"}
        return {"coding": [coding], "text": words}, words

    def presence_said(self, presence: Presence, definition: FindingDefinition) -> tuple[Said, str]:
        """The coded presence and the interpretation code of a sign."""
        return self.presence[presence], absence.interpretation_code(presence, definition.pathological)


def _true_when_not_present(definition: FindingDefinition) -> tuple[Coding, ...]:
    """Codings that still hold when the sign is absent or uncertain.

    A broader code holds of a present sign only: that there is no tumour plop does not mean that there are no
    abnormal heart sounds.
    """
    if definition.id == _BMI:
        # R4's core profile of this LOINC code demands a number, so one that was not taken must not carry it
        return tuple(coding for coding in definition.codings if coding.system != systems.LOINC)
    if definition.kind != "sign":
        return definition.codings
    return tuple(coding for coding in definition.codings if coding.fit == "exact")


def grade_code(axis: str, grade: Grade) -> str:
    """Our code of a grade: `grade:3-of-6`, `grade:2-to-3-of-6`."""
    span = str(grade.low) if grade.low == grade.high else f"{grade.low}-to-{grade.high}"
    return f"{axis}:{span}-of-{grade.of}"
