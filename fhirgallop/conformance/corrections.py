# ruff: noqa: E501 - one expression a line, as published
"""Published invariants whose expression is defective, with the rule that is run in its place.

One row a defect: the expression as published (whichever edition and key carries it), the expression that is
run, and what is wrong with the published one. All else is run as published.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType


@dataclass(frozen=True, slots=True)
class Correction:
    """One row: what is published, what is run, and why."""

    published: str
    run: str
    defect: str


_ROWS = (
    Correction(
        "name.matches('[A-Z]([A-Za-z0-9_]){0,254}')",
        "name.exists() implies name.matches('^[A-Z]([A-Za-z0-9_]){0,254}$')",
        "the pattern has no anchors, so that any name holding one capital letter matches; and a missing name, which is allowed, gives an empty result",
    ),
    Correction(
        "name.exists() implies name.matches('[A-Z]([A-Za-z0-9_]){0,254}')",
        "name.exists() implies name.matches('^[A-Z]([A-Za-z0-9_]){0,254}$')",
        "the pattern has no anchors (R5 has them)",
    ),
    Correction(
        "name.exists() implies name.exists() implies name.matches('[A-Z]([A-Za-z0-9_]){0,254}')",
        "name.exists() implies name.matches('^[A-Z]([A-Za-z0-9_]){0,254}$')",
        "the condition stands twice, the pattern has no anchors",
    ),
    Correction(
        "name.hasValue() implies name.matches('[A-Za-z][A-Za-z0-9\\\\_]{0,63}')",
        "name.hasValue() implies name.matches('^[A-Za-z][A-Za-z0-9\\\\_]{0,63}$')",
        "the pattern has no anchors",
    ),
    Correction(
        "path.matches('[^\\\\s\\\\.,:;\\\\\\'\"\\\\/|?!@#$%&*()\\\\[\\\\]{}]{1,64}(\\\\.[^\\\\s\\\\.,:;\\\\\\'\"\\\\/|?!@#$%&*()\\\\[\\\\]{}]{1,64}(\\\\[x\\\\])?(\\\\:[^\\\\s\\\\.]+)?)*')",
        "path.matches('^[^\\\\s\\\\.,:;\\\\\\'\"\\\\/|?!@#$%&*()\\\\[\\\\]{}]{1,64}(\\\\.[^\\\\s\\\\.,:;\\\\\\'\"\\\\/|?!@#$%&*()\\\\[\\\\]{}]{1,64}(\\\\[x\\\\])?(\\\\:[^\\\\s\\\\.]+)?)*$')",
        "the pattern has no anchors (R4B has them)",
    ),
    Correction(
        "path.matches('[A-Za-z][A-Za-z0-9]*(\\\\.[a-z][A-Za-z0-9]*(\\\\[x])?)*')",
        "path.matches('^[A-Za-z][A-Za-z0-9]*(\\\\.[a-z][A-Za-z0-9]*(\\\\[x])?)*$')",
        "the pattern has no anchors (R4B has them)",
    ),
    Correction(
        "reference.startsWith('#').not() or (reference.substring(1).trace('url') in %rootResource.contained.id.trace('ids'))",
        "reference.exists()  implies (reference.startsWith('#').not() or (reference.substring(1).trace('url') in %rootResource.contained.id.trace('ids')) or (reference='#' and %rootResource!=%resource))",
        "a Reference without `reference` gives an empty result, and '#' alone, which names the container, fails",
    ),
    Correction(
        "reference.startsWith('#').not() or (reference.substring(1).trace('url') in %rootResource.contained.id.trace('ids')) or (reference='#' and %rootResource!=%resource)",
        "reference.exists()  implies (reference.startsWith('#').not() or (reference.substring(1).trace('url') in %rootResource.contained.id.trace('ids')) or (reference='#' and %rootResource!=%resource))",
        "a Reference without `reference` gives an empty result",
    ),
    Correction(
        "fullUrl.contains('/_history/').not()",
        "fullUrl.exists() implies fullUrl.contains('/_history/').not()",
        "an entry without fullUrl gives an empty result",
    ),
    Correction(
        "enableWhen.count() > 2 implies enableBehavior.exists()",
        "enableWhen.count() > 1 implies enableBehavior.exists()",
        "the text says more than one condition, the expression more than two",
    ),
    Correction(
        "operator = 'exists' implies (answer is Boolean)",
        "operator = 'exists' implies (answer is boolean)",
        "Boolean is the System type; an answer is a FHIR boolean",
    ),
    Correction(
        "probability is decimal implies (probability as decimal) <= 100",
        "probability.empty() or ((probability is decimal) implies ((probability as decimal) <= 100))",
        "a missing probability, which is allowed, gives an empty result",
    ),
    Correction(
        "offset.empty() or (when.exists() and ((when in ('C' | 'CM' | 'CD' | 'CV')).not()))",
        "offset.empty() or (when.exists() and when.select($this in ('C' | 'CM' | 'CD' | 'CV')).allFalse())",
        "`in` takes one value, `when` may have several",
    ),
    Correction(
        "clinicalStatus.exists() or verificationStatus.coding.where(system='http://terminology.hl7.org/CodeSystem/condition-ver-status' and code = 'entered-in-error').exists() or category.select($this='problem-list-item').empty()",
        "clinicalStatus.exists() or verificationStatus.coding.where(system='http://terminology.hl7.org/CodeSystem/condition-ver-status' and code = 'entered-in-error').exists() or category.coding.where(system='http://terminology.hl7.org/CodeSystem/condition-category' and code='problem-list-item').empty()",
        "a CodeableConcept is compared with a text, so that any category counts as problem-list-item",
    ),
    Correction(
        "patient.exists() or scope.coding.where(system='something' and code='patient-privacy').exists().not()",
        "patient.exists() or scope.coding.where(system='http://terminology.hl7.org/CodeSystem/consentscope' and code='patient-privacy').exists().not()",
        "the system was left to be filled in; it is the one of the bound value set",
    ),
    Correction(
        "patient.exists() or scope.coding.where(system='something' and code='research').exists().not()",
        "patient.exists() or scope.coding.where(system='http://terminology.hl7.org/CodeSystem/consentscope' and code='research').exists().not()",
        "the system was left to be filled in; it is the one of the bound value set",
    ),
    Correction(
        "patient.exists() or scope.coding.where(system='something' and code='adr').exists().not()",
        "patient.exists() or scope.coding.where(system='http://terminology.hl7.org/CodeSystem/consentscope' and code='adr').exists().not()",
        "the system was left to be filled in; it is the one of the bound value set",
    ),
    Correction(
        "patient.exists() or scope.coding.where(system='something' and code='treatment').exists().not()",
        "patient.exists() or scope.coding.where(system='http://terminology.hl7.org/CodeSystem/consentscope' and code='treatment').exists().not()",
        "the system was left to be filled in; it is the one of the bound value set",
    ),
    Correction(
        "low.empty() or high.empty() or (low <= high)",
        "low.value.empty() or high.value.empty() or low.comparable(high).not() or (low <= high)",
        "bounds in units that cannot be compared give an empty result (R5 lets them pass)",
    ),
    Correction(
        "lowNumerator.empty() or highNumerator.empty() or (lowNumerator <= highNumerator)",
        "lowNumerator.value.empty() or highNumerator.value.empty() or lowNumerator.comparable(highNumerator).not() or (lowNumerator <= highNumerator)",
        "bounds in units that cannot be compared give an empty result",
    ),
    Correction(
        "lowNumerator.hasValue().not() or highNumerator.hasValue().not()  or (lowNumerator.lowBoundary() <= highNumerator.highBoundary())",
        "lowNumerator.value.empty() or highNumerator.value.empty() or lowNumerator.lowBoundary().comparable(highNumerator.highBoundary()).not() or (lowNumerator.lowBoundary() <= highNumerator.highBoundary())",
        "hasValue() is false for every Quantity, so that the rule never bites",
    ),
    Correction(
        "contained.where((('#'+id in (%resource.descendants().reference | %resource.descendants().as(canonical) | %resource.descendants().as(uri) | %resource.descendants().as(url))) or descendants().where(reference = '#').exists() or descendants().where(as(canonical) = '#').exists() or descendants().where(as(canonical) = '#').exists()).not()).trace('unmatched', id).empty()",
        "contained.where(((id.exists() and ('#'+id in (%resource.descendants().reference | %resource.descendants().as(canonical) | %resource.descendants().as(uri) | %resource.descendants().as(url)))) or descendants().where(reference = '#').exists() or descendants().where(as(canonical) = '#').exists() or descendants().where(as(uri) = '#').exists()).not()).trace('unmatched', id).empty()",
        "a contained resource without an id gives an empty result (R4B asks for the id)",
    ),
    Correction(
        "contained.where((('#'+id in (%resource.descendants().reference | %resource.descendants().ofType(canonical) | %resource.descendants().ofType(uri) | %resource.descendants().ofType(url))) or descendants().where(reference = '#').exists() or descendants().where(ofType(canonical) = '#').exists() or descendants().where(ofType(canonical) = '#').exists()).not()).trace('unmatched', id).empty()",
        "contained.where(((id.exists() and ('#'+id in (%resource.descendants().reference | %resource.descendants().ofType(canonical) | %resource.descendants().ofType(uri) | %resource.descendants().ofType(url)))) or descendants().where(reference = '#').exists() or descendants().where(ofType(canonical) = '#').exists() or descendants().where(ofType(canonical) = '#').exists()).not()).trace('unmatched', id).empty()",
        "a contained resource without an id gives an empty result (R4B asks for the id)",
    ),
    Correction(
        "min.empty() or max.empty() or (max = '*') or iif(max != '*', min <= max.toInteger())",
        "min.empty() or max.empty() or (max = '*') or max.toInteger().empty() or (min <= max.toInteger())",
        "a maximum that is no number gives an empty result; eld-3 says that it is none",
    ),
    Correction(
        "start.exists() implies start <= end",
        "(start.exists() and end.exists()) implies start <= end",
        "an appointment without an end gives an empty result; app-2 asks for the end",
    ),
    Correction(
        "max='*' or (max.toInteger() > 0)",
        "max.empty() or max='*' or (max.toInteger() > 0)",
        "a missing maximum, which is allowed, gives an empty result",
    ),
    Correction(
        "binding.empty() or type.code.empty() or type.select((code = 'code') or (code = 'Coding') or (code='CodeableConcept') or (code = 'Quantity') or (code = 'string') or (code = 'uri')).exists()",
        "binding.empty() or type.code.empty() or type.where(code = 'code' or code = 'Coding' or code = 'CodeableConcept' or code = 'CodeableReference' or code = 'Quantity' or code = 'Duration' or code = 'string' or code = 'uri').exists()",
        "select() keeps the comparisons that are false, so that the rule never bites; CodeableReference, which is bound too, is not named",
    ),
    Correction(
        "binding.empty() or type.code.empty() or type.select((code = 'code') or (code = 'Coding') or (code='CodeableConcept') or (code = 'Quantity') or (code = 'string') or (code = 'uri') or (code = 'Duration')).exists()",
        "binding.empty() or type.code.empty() or type.where(code = 'code' or code = 'Coding' or code = 'CodeableConcept' or code = 'CodeableReference' or code = 'Quantity' or code = 'Duration' or code = 'string' or code = 'uri').exists()",
        "select() keeps the comparisons that are false, so that the rule never bites; CodeableReference, which is bound too, is not named",
    ),
    Correction(
        "binding.empty() or type.code.empty() or type.code.contains(\":\") or type.select((code = 'code') or (code = 'Coding') or (code='CodeableConcept') or (code = 'Quantity') or (code = 'string') or (code = 'uri') or (code = 'Duration')).exists()",
        "binding.empty() or type.code.empty() or type.code.where(contains(':')).exists() or type.where(code = 'code' or code = 'Coding' or code = 'CodeableConcept' or code = 'CodeableReference' or code = 'Quantity' or code = 'Duration' or code = 'string' or code = 'uri').exists()",
        "double quotes make no string, contains() takes one text; select() keeps the comparisons that are false, so that the rule never bites; CodeableReference, which is bound too, is not named",
    ),
    Correction(
        "mustHaveValue.value implies valueAlternatives.empty()",
        "(mustHaveValue.exists() and mustHaveValue) implies valueAlternatives.empty()",
        "a missing mustHaveValue, which is allowed, gives an empty result",
    ),
    Correction(
        "type = 'history' implies entry.request.method != 'PATCH'",
        "type = 'history' implies entry.request.method.where($this = 'PATCH').empty()",
        "a list of methods is compared with one text, which says nothing about each",
    ),
    Correction(
        "issues.exists() implies (issues.issue.severity = 'information' or issues.issue.severity = 'warning')",
        "issues.exists() implies issues.issue.all(severity = 'information' or severity = 'warning')",
        "a list of severities is compared with one text, so that two allowed issues fail",
    ),
    Correction(
        "element.where(type.code='Reference' and id.endsWith('.reference') and type.targetProfile.exists() and id.substring(0,$this.length()-10) in %context.element.where(type.code='CodeableReference').id).exists().not()",
        "element.where(type.where(code='Reference').exists() and path.endsWith('.reference') and type.targetProfile.exists() and (path.substring(0,$this.path.length()-10) in %context.element.where(type.where(code='CodeableReference').exists()).path)).exists().not()",
        "$this is the element, not its id, so that length() meets no text (R5 has it right)",
    ),
    Correction(
        "element.where(type.code='CodeableConcept' and id.endsWith('.concept') and binding.exists() and id.substring(0,$this.length()-8) in %context.element.where(type.code='CodeableReference').id).exists().not()",
        "element.where(type.where(code='CodeableConcept').exists() and path.endsWith('.concept') and binding.exists() and (path.substring(0,$this.path.length()-8) in %context.element.where(type.where(code='CodeableReference').exists()).path)).exists().not()",
        "$this is the element, not its id, so that length() meets no text (R5 has it right)",
    ),
    Correction(
        "$this.where(element[0].mustSupport='true').exists().not()",
        "$this.where(element[0].mustSupport=true).exists().not()",
        "a boolean is compared with a text",
    ),
    Correction(
        "(Ingredient.allergenicIndicator.where(value='true').count() + Ingredient.substance.code.reference.count())  < 2",
        "Ingredient.where(allergenicIndicator=true).count() + Ingredient.substance.code.reference.count()  < 2",
        "a boolean is compared with a text",
    ),
    Correction(
        "uniqueId.where(authoritative = 'true').select(type.toString() & period.start.toString() & period.end.toString()).isDistinct()",
        "uniqueId.where(authoritative = true).select(type.toString() & period.start.toString() & period.end.toString()).isDistinct()",
        "a boolean is compared with a text",
    ),
    Correction(
        "composition.exists() implies (composition.resolve().section.entry.reference.where(resolve() is Observation) in (result.reference|result.reference.resolve().hasMember.reference))",
        "composition.exists() implies composition.resolve().section.entry.reference.where(resolve() is Observation).all($this in %context.result.reference or $this in %context.result.reference.resolve().hasMember.reference)",
        "`in` takes one value, a composition refers to several",
    ),
    Correction(
        "onBehalfOf.exists() implies (member.resolve() is Practitioner)",
        "onBehalfOf.exists() implies (member.exists() and member.resolve().all($this is Practitioner))",
        "a member that is not at hand gives an empty result (R4 lets it pass)",
    ),
    Correction(
        "permittedUnit.exists() implies (permittedDataType = 'Quantity').exists()",
        "permittedUnit.exists() implies permittedDataType.where($this = 'Quantity').exists()",
        "exists() is asked of a comparison, which is always there",
    ),
    Correction(
        "%context.repeat(action).where((goalId in %context.goal.id).not()).exists().not()",
        "%context.repeat(action).where(goalId.subsetOf(%context.goal.id).not()).exists().not()",
        "`in` takes one value, an action may serve several goals",
    ),
    Correction(
        "concept.exists() implies concept.code.combine(%resource.concept.descendants().concept.code).isDistinct()",
        "concept.exists() implies concept.code.combine($this.descendants().concept.code).isDistinct()",
        "the codes of the second level are left out (R4 has them)",
    ),
    Correction(
        "concept.where(property.code = 'parent' or property.code = 'child').exists() implies hierarchyMeaning.exists()",
        "concept.where(property.where(code = 'parent' or code = 'child').exists()).exists() implies hierarchyMeaning.exists()",
        "a list of codes is compared with one text",
    ),
    Correction(
        "($this as dateTime).toString().length() >= 8",
        "$this is dateTime implies ($this.hasValue().not() or $this.toString().length() >= 8)",
        "a Period, which is allowed, gives an empty result",
    ),
    Correction(
        "($this is Citation or $this is Evidence or $this is EvidenceReport or $this is EvidenceVariable or $this is MedicinalProductDefinition or $this is PackagedProductDefinition or $this is AdministrableProductDefinition or $this is Ingredient or $this is ClinicalUseDefinition or $this is RegulatedAuthorization or $this is SubstanceDefinition or $this is SubscriptionStatus or $this is SubscriptionTopic) implies (%resource is Citation or %resource is Evidence or %resource is EvidenceReport or %resource is EvidenceVariable or %resource is MedicinalProductDefinition or %resource is PackagedProductDefinition or %resource is AdministrableProductDefinition or %resource is Ingredient or %resource is ClinicalUseDefinition or %resource is RegulatedAuthorization or %resource is SubstanceDefinition or %resource is SubscriptionStatus or %resource is SubscriptionTopic)",
        "($this is Citation or $this is Evidence or $this is EvidenceReport or $this is EvidenceVariable or $this is MedicinalProductDefinition or $this is PackagedProductDefinition or $this is AdministrableProductDefinition or $this is Ingredient or $this is ClinicalUseDefinition or $this is RegulatedAuthorization or $this is SubstanceDefinition or $this is SubscriptionStatus or $this is SubscriptionTopic) implies (%rootResource is Citation or %rootResource is Evidence or %rootResource is EvidenceReport or %rootResource is EvidenceVariable or %rootResource is MedicinalProductDefinition or %rootResource is PackagedProductDefinition or %rootResource is AdministrableProductDefinition or %rootResource is Ingredient or %rootResource is ClinicalUseDefinition or %rootResource is RegulatedAuthorization or %rootResource is SubstanceDefinition or %rootResource is SubscriptionStatus or %rootResource is SubscriptionTopic)",
        "inside a contained resource %resource is that resource; the container is meant",
    ),
)

CORRECTIONS: Mapping[str, Correction] = MappingProxyType({row.published: row for row in _ROWS})


def corrected(expression: str) -> str:
    """The expression to run for a published one."""
    row = CORRECTIONS.get(expression)
    return expression if row is None else row.run
