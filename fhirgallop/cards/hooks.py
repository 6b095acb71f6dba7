"""A call of a CDS Hooks service: what is sent, checked and read.

Source: CDS Hooks 2.0.1, "HTTP Request", "Prefetch Template", "FHIR Resource Access"; the library's
definitions of patient-view and encounter-discharge. Members that are not known here, and extensions, are
ignored. The access token that a client may send is not read: nothing is fetched.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any, Final
from urllib.parse import urlsplit

from fhirgallop.cards.discovery import Service, Wanted
from fhirgallop.outcome import Issue, has_errors

MAX_TEXT: Final = 2000
_UUID: Final = re.compile(r"[0-9A-Fa-f]{8}(?:-[0-9A-Fa-f]{4}){3}-[0-9A-Fa-f]{12}", re.ASCII)
_ID: Final = re.compile(r"[A-Za-z0-9\-.]{1,64}", re.ASCII)  # FHIR R4 id
_AUTHORISATION: Final = ("access_token", "token_type", "expires_in", "scope", "subject")
# Members that only STU3 or DSTU2 resources have; R4 and later name them otherwise.
_OLD_MEMBERS: Final[Mapping[str, tuple[str, ...]]] = {
    "Observation": ("comment", "comments", "related", "context"),
    "Condition": ("context", "dateRecorded"),
    "Procedure": ("context", "notPerformed", "notDone"),
    "DiagnosticReport": ("context", "codedDiagnosis"),
    "Encounter": ("indication",),
}


@dataclass(frozen=True, slots=True)
class Call:
    """One call, checked.

    Attributes:
        instance: the hookInstance, in lower case.
        server: the FHIR server the resources come from; empty when it was not told.
        user: who looks (`Practitioner/7`).
        patient: FHIR id.
        encounter: FHIR id; empty when none.
        draft: the Bundle of a draft examination, where the hook brings one.
        record: the same as the clinic's own record, and `map_name`, the map that reads it.
        prefetch: what was sent and can be used, by key.
        missing: keys that were not sent, or not as asked for; what they would say stays unknown.
    """

    instance: str
    server: str
    user: str
    patient: str
    encounter: str
    draft: Mapping[str, Any] | None
    record: Mapping[str, Any] | None
    map_name: str
    prefetch: Mapping[str, Any]
    missing: tuple[str, ...]

    @property
    def by_clinician(self) -> bool:
        """False when a patient or a relative looks: cards are for clinicians, and shown to no one else."""
        return self.user.startswith("Practitioner")


def read_call(value: Any, service: Service) -> tuple[Call | None, list[Issue]]:
    """A call of `service`, or None and everything that is wrong with it.

    Issues with the code `incomplete` mean data that are needed and were not sent; they come alone, for a call
    that is otherwise well formed.
    """
    if not isinstance(value, dict):
        return None, [_fault("structure", "hook-body", "The body is not a JSON object; send one.")]
    issues = [*_envelope(value, service)]
    context = value.get("context")
    if not isinstance(context, dict):
        issues.append(_fault("required", "hook-context", "context is missing, or no object.", "context"))
        return None, issues
    issues += _context(context, service)
    prefetch = value.get("prefetch")
    if prefetch is not None and not isinstance(prefetch, dict):
        issues.append(_fault("structure", "hook-prefetch", "prefetch is no object.", "prefetch"))
    if has_errors(issues):
        return None, issues
    usable, missing = _prefetched(prefetch or {}, service)
    issues += [_incomplete(key) for key in missing if service.prefetch[key].required]
    issues += _old({**usable, **_drafted(context, service)})
    issues += _same_patient(usable.get("patient"), context["patientId"])
    if has_errors(issues):
        return None, issues
    record = context.get("record")
    return (
        Call(
            str(value["hookInstance"]).lower(),
            str(value.get("fhirServer", "")).rstrip("/"),
            context["userId"],
            context["patientId"],
            context.get("encounterId", ""),
            context.get("draftObservations") if service.takes_draft else None,
            record if service.takes_draft else None,
            context.get("map", "") if service.takes_draft else "",
            usable,
            tuple(missing),
        ),
        issues,
    )


def _fault(code: str, rule: str, words: str, field: str = "") -> Issue:
    return Issue("error", code, rule, words, field=field)


def _envelope(value: Mapping[str, Any], service: Service) -> Iterator[Issue]:
    if not _short(value.get("hook")):
        yield _fault("required", "hook-name", "hook is missing; name the hook that fired.", "hook")
    elif value["hook"] != service.hook:
        words = f"This service answers to {service.hook}; the request names another hook."
        yield _fault("value", "hook-mismatch", words, "hook")
    instance = value.get("hookInstance")
    if not (isinstance(instance, str) and _UUID.fullmatch(instance)):
        words = "hookInstance is missing, or no UUID; send a new one for each time the hook fires."
        yield _fault("required" if instance is None else "value", "hook-instance", words, "hookInstance")
    server = value.get("fhirServer")
    if server is not None and not _is_address(server):
        words = "fhirServer is no http or https address without user, query and fragment."
        yield _fault("value", "hook-server", words, "fhirServer")
    given = value.get("fhirAuthorization")
    if given is None:
        return
    if server is None:
        words = "fhirAuthorization comes without fhirServer; send both, or neither."
        yield _fault("required", "cds-r-1", words, "fhirServer")
    if not isinstance(given, dict):
        words = "fhirAuthorization is no object."
        yield _fault("structure", "hook-authorization", words, "fhirAuthorization")
        return
    for name in _AUTHORISATION:
        if name not in given:
            words = f"{name} is missing; send all of {', '.join(_AUTHORISATION)}."
            yield _fault("required", "hook-authorization", words, f"fhirAuthorization.{name}")
    if "token_type" in given and given["token_type"] != "Bearer":  # noqa: S105 - the kind, not a token
        words = "token_type is not Bearer."
        yield _fault("value", "hook-authorization", words, "fhirAuthorization.token_type")


def _short(value: Any) -> bool:
    return isinstance(value, str) and 0 < len(value) <= MAX_TEXT


def _is_address(value: Any) -> bool:
    if not _short(value):
        return False
    try:
        parts = urlsplit(value)
        named = parts.hostname is not None and parts.port != 0
    except ValueError:
        return False
    plain = not (parts.query or parts.fragment or parts.username is not None)
    return named and plain and parts.scheme in ("http", "https") and value.isprintable() and " " not in value


def _context(context: Mapping[str, Any], service: Service) -> Iterator[Issue]:
    user = context.get("userId")
    kind, _, id_ = user.partition("/") if isinstance(user, str) else ("", "", "")
    if kind not in service.users or not _ID.fullmatch(id_):
        words = f"userId is missing, or not one of {', '.join(f'{kind}/id' for kind in service.users)}."
        yield _fault("required" if user is None else "value", "hook-user", words, "context.userId")
    patient = context.get("patientId")
    if not (isinstance(patient, str) and _ID.fullmatch(patient)):
        words = "patientId is missing, or not the bare id of a Patient; send 123, not Patient/123."
        yield _fault("required" if patient is None else "value", "hook-patient", words, "context.patientId")
    encounter = context.get("encounterId")
    missing = encounter is None and service.needs_encounter
    if missing or (encounter is not None and not (isinstance(encounter, str) and _ID.fullmatch(encounter))):
        words = "encounterId is missing, or not the bare id of an Encounter."
        yield _fault("required" if missing else "value", "hook-encounter", words, "context.encounterId")
    if service.takes_draft:
        yield from _draft(context)


def _draft(context: Mapping[str, Any]) -> Iterator[Issue]:
    bundle, record, name = (context.get(key) for key in ("draftObservations", "record", "map"))
    if (bundle is None) == (record is None):
        words = "Send either draftObservations, or record together with map."
        yield _fault("required", "hook-draft", words, "context.draftObservations")
    if bundle is not None and not (isinstance(bundle, dict) and bundle.get("resourceType") == "Bundle"):
        words = "draftObservations is no FHIR Bundle."
        yield _fault("structure", "hook-draft", words, "context.draftObservations")
    if record is not None and not isinstance(record, dict):
        yield _fault("structure", "hook-draft", "record is no object.", "context.record")
    if record is not None and not _short(name):
        words = "A record needs map, the name of the template map that reads it."
        yield _fault("required", "hook-draft", words, "context.map")


def _prefetched(prefetch: Mapping[str, Any], service: Service) -> tuple[dict[str, Any], list[str]]:
    """What can be used, and the keys that were not sent as asked for.

    null and an empty searchset say that there are no data; a key that is absent, an OperationOutcome (the
    client could not fetch it) and a resource of another type say nothing.
    """
    usable: dict[str, Any] = {}
    missing: list[str] = []
    for key, wanted in service.prefetch.items():
        if key not in prefetch:
            missing.append(key)
        elif prefetch[key] is None or _as_asked(prefetch[key], wanted):
            usable[key] = prefetch[key]
        else:
            missing.append(key)
    return usable, missing


def _as_asked(value: Any, wanted: Wanted) -> bool:
    if not isinstance(value, dict):
        return False
    kind = value.get("resourceType")
    if wanted.is_read:
        return bool(kind == wanted.type)
    return kind == "Bundle" and value.get("type", "searchset") in ("searchset", "collection")


def _incomplete(key: str) -> Issue:
    words = (
        f"The prefetch key {key} is needed and was not sent, or is not what its template asks for. Send it; "
        "null or an empty searchset where there are no data. Nothing is fetched from fhirServer."
    )
    return Issue("error", "incomplete", "hook-prefetch-missing", words, field=f"prefetch.{key}")


def _drafted(context: Mapping[str, Any], service: Service) -> dict[str, Any]:
    return {"draftObservations": context.get("draftObservations")} if service.takes_draft else {}


def _same_patient(patient: Any, id_: str) -> Iterator[Issue]:
    if isinstance(patient, dict) and patient.get("id") != id_:
        words = "The Patient in the prefetch is another one than context.patientId; nothing was evaluated."
        yield _fault("business-rule", "hook-other-patient", words, "prefetch.patient")


def _old(prefetch: Mapping[str, Any]) -> Iterator[Issue]:
    """One issue a key whose resources are of an older FHIR: read as R4 they would say something else."""
    for key, value in prefetch.items():
        if any(_is_old(resource) for resource in _resources(value)):
            words = f"The resources in {key} are of FHIR STU3 or DSTU2; send R4, R4B or R5."
            yield Issue("error", "incomplete", "hook-old-fhir", words, field=key)


def _resources(value: Any) -> Iterator[Mapping[str, Any]]:
    if not isinstance(value, dict):
        return
    if value.get("resourceType") != "Bundle":
        yield value
        return
    entries = value.get("entry")
    for entry in entries if isinstance(entries, list) else ():
        resource = entry.get("resource") if isinstance(entry, dict) else None
        if isinstance(resource, dict):
            yield resource


def _is_old(resource: Mapping[str, Any]) -> bool:
    kind = resource.get("resourceType")
    members = _OLD_MEMBERS.get(kind, ()) if isinstance(kind, str) else ()
    if any(member in resource for member in members):
        return True
    statuses = (resource.get("clinicalStatus"), resource.get("verificationStatus"))
    return kind == "Condition" and any(isinstance(status, str) for status in statuses)
