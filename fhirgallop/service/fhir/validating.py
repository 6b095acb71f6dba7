"""$validate: what is wrong with a resource, and whether it could be created or updated here.

Source: FHIR R4 operation Resource-validate (`mode` create adds what a create asks for, update and delete are
asked of one resource that is here).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any, Final

from fastapi import Request

from fhirgallop.codes import fhirjson
from fhirgallop.conformance.registry import registry
from fhirgallop.conformance.validator import validate
from fhirgallop.observations.editions import Edition
from fhirgallop.outcome import Issue, has_errors, ordered
from fhirgallop.service import answers, audit
from fhirgallop.service.fhir.address import KEPT, is_id
from fhirgallop.service.fhir.interactions import desk, seen
from fhirgallop.service.fhir.tokens import own_id
from fhirgallop.service.fhir.unjudged import unjudged
from fhirgallop.storage.resource_search import Kept

MODES: Final = ("create", "update", "delete", "profile")
_OF_INSTANCE: Final = ("update", "delete")
_NO_DELETE: Final = Issue(
    "error", "business-rule", "validate-no-delete",
    "Nothing is deleted here over FHIR: give what was wrong the status entered-in-error.",
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class Question:
    """What is to be judged.

    Attributes:
        edition: FHIR edition.
        type: type of the address; empty where it names none.
        fhir_id: id of the address; empty where it names none.
        profiles: canonicals to be met.
        mode: one of the modes, or empty.
    """

    edition: Edition
    type: str
    fhir_id: str
    profiles: tuple[str, ...] = ()
    mode: str = ""


def judge(request: Request, body: bytes, asked: Question) -> list[Issue]:
    """What is noticed.

    Raises:
        RefusalError: where the check could not be run.
    """
    value, issues = fhirjson.read(body)
    if has_errors(issues) or not isinstance(value, dict):
        # the judge says what is wrong with the text, and where
        raise answers.RefusalError(400, validate(body, asked.edition))
    resource: bytes | dict[str, Any] | None = body
    if value.get("resourceType") == "Parameters" and asked.type != "Parameters":
        value, asked = _unpacked(value, asked)
        resource = value
    _fitting(asked)
    before = _instance(request, asked) if asked.fhir_id else None
    if asked.mode == "delete":
        return [_NO_DELETE]
    if resource is None or value is None:
        text = "The Parameters hold no resource; add a parameter named resource."
        raise answers.refusal(400, "required", "http-validate-resource", text)
    found = [
        *validate(resource, asked.edition, asked.profiles),
        *_beside(request, value, asked, before),
        *unjudged(value),
    ]
    if asked.type and value.get("resourceType") != asked.type:
        text = (
            f"The address is for {asked.type}, the resource is of another type; send it to its own address."
        )
        found = [*found, Issue("error", "invalid", "http-other-type", text)]
    return ordered(found)


def _fitting(asked: Question) -> None:
    if asked.mode and asked.mode not in MODES:
        text = f"mode is one of {', '.join(MODES)}."
        raise answers.refusal(400, "value", "http-validate-mode", text)
    if asked.mode in _OF_INSTANCE and not asked.fhir_id:
        text = f"The mode {asked.mode} is asked of one resource: POST Type/id/$validate."
        raise answers.refusal(400, "invalid", "http-validate-mode", text)
    if not all(map(registry(asked.edition).profile, asked.profiles)):
        text = "A profile that was asked for is not known here; load its package, or leave it out."
        raise answers.refusal(422, "not-found", "http-unknown-profile", text)


def _instance(request: Request, asked: Question) -> Kept:
    known = asked.type in KEPT and is_id(asked.fhir_id)
    store = desk(request).store
    kept = seen(request, store.read(asked.edition, asked.type, asked.fhir_id) if known else None)
    audit.about(request, patients=[kept.patient], entities=[f"{asked.type}/{asked.fhir_id}"])
    return kept


def _beside(request: Request, resource: dict[str, Any], asked: Question, before: Kept | None) -> list[Issue]:
    """What a create or an update asks for beside a good resource."""
    identity = own_id(resource)
    type_ = str(resource.get("resourceType"))
    if asked.mode == "create" and identity and type_ in KEPT:
        if not request.state.caller.reach(type_, "s").everything:
            text = (
                "Whether there is a resource with this identity was not looked up; the token does not permit."
            )
            return [Issue("information", "incomplete", "validate-uniqueness", text)]
        if desk(request).store.read(asked.edition, type_, identity) is not None:
            text = "There is a resource with this identity already; update it."
            return [Issue("error", "duplicate", "resource-duplicate", text, f"{type_}.identifier")]
    if asked.mode == "update" and before is not None:
        return list(_as_update(resource, type_, identity, before))
    return []


def _as_update(resource: dict[str, Any], type_: str, identity: str, before: Kept) -> list[Issue]:
    found = []
    if resource.get("id") != before.fhir_id:
        text = "The resource's id is not that of its address; send it with the same id."
        found.append(Issue("error", "value", "http-other-id", text, f"{type_}.id"))
    if identity != before.fhir_id and (identity or "-" in before.fhir_id):
        text = "A resource keeps the urn:uuid identity it was created with."
        found.append(Issue("error", "business-rule", "resource-identity", text, f"{type_}.identifier"))
    meta = resource.get("meta")
    version = meta.get("versionId") if isinstance(meta, dict) else None
    if version is not None and version != str(before.version):
        text = "The resource has changed since the version that this one was made of."
        found.append(Issue("error", "conflict", "http-version-conflict", text, f"{type_}.meta.versionId"))
    return found


def _unpacked(parameters: dict[str, Any], asked: Question) -> tuple[dict[str, Any] | None, Question]:
    """The resource that a Parameters resource holds, and what it asks beside."""
    resource: dict[str, Any] | None = None
    profiles: list[str] = []
    mode = ""
    entries = parameters.get("parameter")
    for entry in entries if isinstance(entries, list) else ():
        if not isinstance(entry, dict):
            continue
        name = entry.get("name")
        if name == "resource" and isinstance(entry.get("resource"), dict):
            resource = entry["resource"]
        elif name == "profile":
            given = entry.get("valueUri", entry.get("valueCanonical"))
            profiles += [given] if isinstance(given, str) else []
        elif name == "mode":
            mode = str(entry.get("valueCode", "?"))
        else:
            text = "A parameter has no meaning here; known are resource, mode, profile."
            raise answers.refusal(400, "not-supported", "http-unknown-parameter", text)
    if asked.mode and mode and mode != asked.mode:
        raise answers.refusal(400, "invalid", "http-validate-mode", "mode is given twice, and differs.")
    return resource, replace(asked, profiles=(*asked.profiles, *profiles), mode=mode or asked.mode)
