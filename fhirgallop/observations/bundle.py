"""Exam -> transaction Bundle: the findings, the panel, the report and the provenance of the conversion."""

from __future__ import annotations

import hashlib
from datetime import UTC, datetime
from typing import Any

from fhirgallop.codes import fhirjson
from fhirgallop.exam.exam import Exam
from fhirgallop.observations.build import Shared, builder
from fhirgallop.observations.editions import EDITIONS, Edition
from fhirgallop.observations.identity import conditional_update
from fhirgallop.observations.provenance import CONVERSION_TAG, provenance
from fhirgallop.observations.report import panel, report
from fhirgallop.observations.revision import revise

Resources = dict[str, dict[str, Any]]


def encode(
    exam: Exam,
    *,
    form: str,
    recorded: datetime,
    edition: Edition = "R4",
    snomed: bool = True,
    earlier: dict[str, Any] | None = None,
) -> dict[str, Any]:
    """The transaction Bundle of `exam`, as plain dictionaries with exact decimals; treat it as read-only.

    Args:
        exam: what the clinician meant.
        form: intake form of the record it was read from.
        recorded: when this conversion takes place (with a zone); becomes `issued` and `recorded`.
        edition: FHIR edition to write.
        snomed: write SNOMED CT codings; without them our own code system carries the meaning.
        earlier: the Bundle this examination gave before, when it is sent again. What is unchanged stays as it
            was, what changed is amended or corrected, what is gone becomes entered-in-error.
    """
    issued = instant(recorded)
    shared = Shared.of(exam, issued)
    made = builder(snomed=snomed)
    findings = made.all_of(exam, shared)
    panel_urn, panel_resource = panel(made.catalogue, shared, [urn for urn, _ in findings], snomed=snomed)
    report_urn, report_resource = report(exam, shared, panel_urn, [resource for _, resource in findings])
    resources: Resources = dict(findings)
    resources[panel_urn] = panel_resource
    resources[report_urn] = report_resource
    if earlier is not None:
        resources = revise(resources, earlier, exam.status)
    tag = shared.identities.of("conversion", _fingerprint(resources) if earlier else edition)
    trail = provenance(exam, form, shared, list(resources), EDITIONS[edition], tag)
    bundle = transaction(resources)
    once = f"_tag={CONVERSION_TAG}|{tag.removeprefix('urn:uuid:')}"
    bundle["entry"].append(
        {
            "fullUrl": tag,
            "resource": trail,
            "request": {"method": "POST", "url": "Provenance", "ifNoneExist": once},
        }
    )
    return bundle


def transaction(resources: Resources) -> dict[str, Any]:
    """Transaction Bundle that creates each resource once, by its identity, and updates it ever after."""
    entries = [
        {"fullUrl": urn, "resource": resource, "request": conditional_update(resource["resourceType"], urn)}
        for urn, resource in resources.items()
    ]
    return {"resourceType": "Bundle", "type": "transaction", "entry": entries}


def instant(moment: datetime) -> str:
    """FHIR instant in UTC, to the second."""
    return moment.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")


def _fingerprint(resources: Resources) -> str:
    return hashlib.sha256(fhirjson.write(resources)).hexdigest()
