"""Observations out of a form that carries its own codes (observation-based extraction).

Source: HL7 Structured Data Capture (SDC) 4.0.0, "Form data extraction", observation-based; where it is
silent, the same page of the 3.0 line. This way cannot say that something could not be assessed, nor speak of
anyone but the subject (no dataAbsentReason, no focus): such findings need a template map.
"""

from __future__ import annotations

import uuid
from collections import Counter
from collections.abc import Collection, Mapping
from dataclasses import dataclass, field
from decimal import Decimal
from typing import Any, Final

from fhirgallop.codes import systems
from fhirgallop.observations import text
from fhirgallop.observations.editions import Edition
from fhirgallop.observations.extract_plan import DEEPEST, Plan, mappings, plans
from fhirgallop.observations.identity import identifier
from fhirgallop.outcome import Issue, Severity, has_errors

_NAMESPACE: Final = uuid.uuid5(uuid.NAMESPACE_URL, systems.BASE + "/extract")
_COMPLETE: Final = ("completed", "amended")
_SUBJECTS: Final = ("Patient", "Group", "Device", "Location")
_PERFORMERS: Final = (
    "Practitioner", "PractitionerRole", "Organization", "CareTeam", "Patient", "RelatedPerson",
)  # fmt: skip
_PART_OF: Final = (
    "MedicationAdministration", "MedicationDispense", "MedicationStatement", "Procedure", "Immunization",
    "ImagingStudy",
)  # fmt: skip
_KEPT: Final = ("valueBoolean", "valueInteger", "valueString", "valueDateTime", "valueTime")
_FIFTH_ONLY: Final = ("valueAttachment", "valueReference")
Observation = dict[str, Any]


def extract(
    response: dict[str, Any],
    questionnaire: dict[str, Any],
    *,
    edition: Edition = "R4",
    beside: Collection[str] = (),
) -> tuple[list[Observation], list[Issue]]:
    """The Observations that a completed form's answers are, and everything noticed.

    Pure: nothing is stored, and an unanswered question changes nothing. Each Observation carries a stable
    `urn:uuid:` identifier, by which `hasMember` and `derivedFrom` point to the others of the form. An error
    among the issues means that there are no Observations.

    Args:
        response: QuestionnaireResponse, with exact decimals.
        questionnaire: the Questionnaire it answers, with codes and extraction flags.
        edition: FHIR edition of the Observations.
        beside: other ways of extraction (`templateExtract`) that the caller sees to.
    """
    by_link, issues = plans(questionnaire, beside)
    extraction = _Extraction(by_link, edition, issues)
    extraction.judge(response)
    if has_errors(issues):
        return [], issues
    extraction.read_head(response)
    extraction.items(response.get("item"), None, "", 1)
    if has_errors(issues):
        return [], issues
    found = [_finished(made) for made in extraction.made if made.has_content]
    if not found:
        notice = "The form holds no answer that is marked for extraction."
        issues.append(Issue("information", "informational", "sdc-nothing-to-extract", notice))
    return found, issues


@dataclass(slots=True)
class _Made:
    """An Observation in the making."""

    urn: str
    resource: Observation
    words: str = ""
    components: list[Observation] = field(default_factory=list)
    members: list[_Made] = field(default_factory=list)

    @property
    def has_content(self) -> bool:
        """A group says something only by what belongs to it."""
        valued = any(key.startswith("value") for key in self.resource)
        return valued or bool(self.components) or any(member.has_content for member in self.members)


class _Extraction:
    def __init__(self, by_link: Mapping[str, Plan], edition: Edition, issues: list[Issue]) -> None:
        self.made: list[_Made] = []
        self._plans = by_link
        self._edition = edition
        self._issues = issues
        self._head: Observation = {}
        self._tail: Observation = {}
        self._base = ""

    def _note(self, severity: Severity, code: str, rule: str, words: str, link: str = "") -> None:
        self._issues.append(Issue(severity, code, rule, words, field=link[:64]))

    def judge(self, response: Mapping[str, Any]) -> None:
        """Whether this is a response that may be extracted at all."""
        if response.get("resourceType") != "QuestionnaireResponse":
            self._note("error", "structure", "sdc-not-a-response", "Send a QuestionnaireResponse.")
        elif response.get("status") not in _COMPLETE:
            words = "Only a completed (or amended) form is extracted; complete it first."
            self._note("error", "business-rule", "sdc-not-completed", words, "status")
        if mappings(response.get("modifierExtension")):
            words = "A modifier extension may change the meaning of the response; nothing is extracted."
            self._note("error", "not-supported", "sdc-modifier", words)

    def read_head(self, response: Mapping[str, Any]) -> None:
        """What all Observations of the form have in common."""
        written = response.get("identifier")
        first = mappings(written)[0] if mappings(written) else written
        own = first if isinstance(first, Mapping) else {}
        known = (own.get("system"), own.get("value"), response.get("id"))
        self._base = repr(known) if any(known) else repr(response)
        for name in ("basedOn", "partOf"):
            copied = mappings(response.get(name))
            if name == "partOf":
                copied = [reference for reference in copied if self._fits(reference, _PART_OF, name)]
            if copied:
                self._head[name] = copied
        subject = response.get("subject")
        if isinstance(subject, Mapping) and self._fits(subject, _SUBJECTS, "subject"):
            self._tail["subject"] = subject
        else:
            self._note(
                "error",
                "required",
                "sdc-no-subject",
                "The response has no subject that can be examined.",
                "subject",
            )
        if isinstance(response.get("encounter"), Mapping):
            self._tail["encounter"] = response["encounter"]
        authored = response.get("authored")
        if isinstance(authored, str) and authored:
            self._tail["effectiveDateTime"] = authored
            if "T" in authored:
                self._tail["issued"] = authored
        else:
            self._note(
                "warning",
                "required",
                "sdc-no-time",
                "The response does not say when it was authored.",
                "authored",
            )
        author = response.get("author")
        if isinstance(author, Mapping) and self._fits(author, _PERFORMERS, "author"):
            self._tail["performer"] = [author]
        source = response.get("id")
        if isinstance(source, str) and source:
            self._tail["derivedFrom"] = [{"reference": f"QuestionnaireResponse/{source}"}]
        elif own.get("value"):
            self._tail["derivedFrom"] = [{"type": "QuestionnaireResponse", "identifier": own}]

    def _fits(self, reference: Mapping[str, Any], types: tuple[str, ...], name: str) -> bool:
        """Whether a reference may stand in an Observation; one that names no type may."""
        written = reference.get("reference")
        named = written.rpartition("/")[0].rpartition("/")[2] if isinstance(written, str) else ""
        kind = reference.get("type") or named
        if not kind or kind in types:
            return True
        words = f"An Observation cannot point there from {name}; allowed are {', '.join(types)}."
        self._note("warning", "not-supported", "sdc-reference-type", words, name)
        return False

    def items(self, items: Any, parent: _Made | None, path: str, depth: int) -> None:
        """Every answered item of a level; `parent` is the Observation of the nearest level above."""
        if depth > DEEPEST:
            self._note("error", "too-long", "sdc-too-deep", f"Items are nested more than {DEEPEST} deep.")
            return
        count: Counter[str] = Counter()
        for item in mappings(items):
            link = item.get("linkId")
            if not isinstance(link, str) or link not in self._plans:
                words = "The form has no item with this linkId; correct it, or send the form's right version."
                self._note("error", "not-found", "form-unknown-link", words, str(link))
                continue
            here = f"{path}/{link}[{count[link]}]"
            count[link] += 1
            if mappings(item.get("modifierExtension")):
                words = "A modifier extension may change the meaning of this item; nothing is extracted."
                self._note("error", "not-supported", "sdc-modifier", words, link)
            plan = self._plans[link]
            answers = mappings(item.get("answer"))
            group = parent
            if not answers and plan.relation and plan.codings and mappings(item.get("item")):
                group = self._group(plan, link, parent, here)
            self.items(item.get("item"), group, here, depth + 1)
            for number, answer in enumerate(answers):
                place = f"{here}({number})"
                made = self._answer(plan, link, answer, parent, place)
                self.items(answer.get("item"), made or parent, place, depth + 1)

    def _group(self, plan: Plan, link: str, parent: _Made | None, path: str) -> _Made | None:
        if plan.relation == "component":
            if parent is None:
                # the flag is meant for what lies inside; the group itself heads the components
                return self._add(plan, parent, path, {}, "")
            self._note("error", "not-supported", "sdc-component-of-component",
                       "A component cannot hold components; flag this group otherwise.", link)  # fmt: skip
            return parent
        return self._add(plan, parent, path, {}, "")

    def _answer(
        self, plan: Plan, link: str, answer: Mapping[str, Any], parent: _Made | None, path: str
    ) -> _Made | None:
        """The Observation of one answer; None when it is none of its own."""
        if not plan.relation:
            return None
        if not plan.codings:
            words = "This item is marked for extraction and has no code; it is not extracted."
            self._note("information", "informational", "sdc-no-code", words, link)
            return None
        if mappings(answer.get("modifierExtension")):
            words = "A modifier extension may change the meaning of this answer; nothing is extracted."
            self._note("error", "not-supported", "sdc-modifier", words, link)
            return None
        value = self._value(plan, link, answer)
        if value is None:
            return None
        said = _words(value)
        if plan.relation == "component":
            if parent is None:
                words = "This item is a component and no item above it is extracted; flag one."
                self._note("error", "required", "sdc-no-parent", words, link)
                return None
            parent.components.append({"code": _code(plan), **value})
            parent.words += f"{'; ' if parent.words else ''}{_label(plan)}: {said}"
            return None
        return self._add(plan, parent, path, value, said)

    def _add(self, plan: Plan, parent: _Made | None, path: str, value: Observation, words: str) -> _Made:
        urn = f"urn:uuid:{uuid.uuid5(_NAMESPACE, f'{self._base}{path}')}"
        tail = dict(self._tail)
        if parent is not None and plan.relation == "derived":
            tail["derivedFrom"] = [*tail.get("derivedFrom", []), {"reference": parent.urn}]
        derived = tail.pop("derivedFrom", None)
        resource: Observation = {
            "resourceType": "Observation",
            "text": None,
            "identifier": identifier(urn),
            **self._head,
            "status": "final",
            **({"category": list(plan.categories)} if plan.categories else {}),
            "code": _code(plan),
            **tail,
            **value,
            **({"derivedFrom": derived} if derived else {}),
        }
        made = _Made(urn, resource, f"{_label(plan)}: {words}" if words else _label(plan))
        self.made.append(made)
        if parent is not None and plan.relation == "member":
            parent.members.append(made)
        return made

    def _value(self, plan: Plan, link: str, answer: Mapping[str, Any]) -> Observation | None:
        """Observation.value[x] of an answer; None when there is none."""
        keys = [key for key in answer if key.startswith("value")]
        if len(keys) != 1:
            if keys:
                self._note("error", "structure", "form-answer-value", "Send one value in each answer.", link)
            return None
        key, value = keys[0], answer[keys[0]]
        number = isinstance(value, (int, Decimal)) and not isinstance(value, bool)
        if key in ("valueDecimal", "valueInteger") and number and (plan.unit or key == "valueDecimal"):
            return {"valueQuantity": {"value": value, **self._unit(plan, link)}}
        if key == "valueQuantity" and isinstance(value, Mapping):
            return self._quantity(plan, link, value)
        if key == "valueCoding" and isinstance(value, Mapping):
            display = value.get("display")
            return {"valueCodeableConcept": {"coding": [value], **({"text": display} if display else {})}}
        if key == "valueDate" and isinstance(value, str):
            return {"valueDateTime": value}
        if key == "valueUri" and isinstance(value, str):
            return {"valueString": value}
        if (key in _KEPT or (key in _FIFTH_ONLY and self._edition == "R5")) and value not in ("", None):
            return {key: value}
        words = f"An answer with {key[:24]} cannot be the value of an {self._edition} Observation."
        self._note("warning", "not-supported", "sdc-value-not-supported", words, link)
        return None

    def _unit(self, plan: Plan, link: str) -> Observation:
        unit = plan.unit
        if not unit:
            words = (
                "The answer is a decimal and the form names no questionnaire-unit; it goes without a unit."
            )
            self._note("warning", "incomplete", "sdc-no-unit", words, link)
            return {}
        printed = unit.get("display") or unit.get("code")
        return {
            k: v
            for k, v in (("unit", printed), ("system", unit.get("system")), ("code", unit.get("code")))
            if v
        }

    def _quantity(self, plan: Plan, link: str, value: Mapping[str, Any]) -> Observation | None:
        if "value" not in value:
            words = "A quantity without a number is not extracted; send its value."
            self._note("warning", "incomplete", "sdc-value-not-supported", words, link)
            return None
        if "comparator" in value:
            words = "The quantity is a limit (it has a comparator) and no measured value; review its use."
            self._note("warning", "business-rule", "sdc-comparator", words, link)
        if plan.unit and not value.get("unit") and not value.get("code"):
            return {"valueQuantity": {**value, **self._unit(plan, link)}}
        return {"valueQuantity": dict(value)}


def _code(plan: Plan) -> Observation:
    return {"coding": list(plan.codings), **({"text": plan.text} if plan.text else {})}


def _label(plan: Plan) -> str:
    return plan.text or str(plan.codings[0].get("display") or plan.codings[0].get("code", ""))


def _words(value: Observation) -> str:
    ((_, held),) = value.items()
    if isinstance(held, bool):
        return "yes" if held else "no"
    if not isinstance(held, Mapping):
        return str(held)
    if "coding" in held:
        coding = held["coding"][0]
        return str(coding.get("display") or coding.get("code") or "")
    parts = (
        held.get("comparator", ""),
        held.get("value", ""),
        " ",
        held.get("unit") or held.get("code") or "",
    )
    return "".join(map(str, parts)).strip()


def _finished(made: _Made) -> Observation:
    resource = made.resource
    if made.components:
        resource["component"] = made.components
    members = [{"reference": member.urn} for member in made.members if member.has_content]
    if members:
        resource["hasMember"] = members
    resource["text"] = text.narrative(text.escaped(text.plain(made.words)))
    return resource
