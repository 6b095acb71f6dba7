"""A call of a CDS Hooks service: what is sent, checked and read.

Source: CDS Hooks 2.0.1, "HTTP Request", "FHIR Resource Access"; the library's definitions of patient-view and
encounter-discharge. Members that are not known here, and extensions, are ignored.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Any, Final
from urllib.parse import urlsplit

from fhirgallop.cards.discovery import Service
from fhirgallop.cards.prefetch import Prefetch, faults, read_prefetch
from fhirgallop.outcome import Issue, has_errors

MAX_TEXT: Final = 2000
_UUID: Final = re.compile(r"[0-9A-Fa-f]{8}(?:-[0-9A-Fa-f]{4}){3}-[0-9A-Fa-f]{12}", re.ASCII)
_ID: Final = re.compile(r"[A-Za-z0-9\-.]{1,64}", re.ASCII)  # FHIR R4 id
_BEARER: Final = re.compile(r"[A-Za-z0-9\-._~+/]{1,8000}={0,2}", re.ASCII)  # RFC 6750, b64token
_MAX_SCOPE: Final = 8000


@dataclass(frozen=True, slots=True)
class Authorisation:
    """What a client lends for reading from its server; lives as long as the call, and is shown nowhere.

    Attributes:
        token: access token.
        seconds: how long it lives.
        scope: SMART scopes, separated by blanks.
        patient: FHIR id that its patient scopes are meant for; empty when not told.
    """

    token: str = field(repr=False)
    seconds: int
    scope: str
    patient: str


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
        prefetch: the chart, as far as it was sent.
        authorisation: for reading more of it; None where the client lends none.
    """

    instance: str
    server: str
    user: str
    patient: str
    encounter: str
    draft: Mapping[str, Any] | None
    record: Mapping[str, Any] | None
    map_name: str
    prefetch: Prefetch
    authorisation: Authorisation | None

    @property
    def by_clinician(self) -> bool:
        """False when a patient or a relative looks: cards are for clinicians, and shown to no one else."""
        return self.user.startswith("Practitioner")

    def faults(self, service: Service) -> list[Issue]:
        """What keeps it from being evaluated, once nothing more can be fetched.

        Issues with the code `incomplete` mean data that are needed and are unknown.
        """
        return list(faults(self.prefetch, service, self.patient, self.draft))


def read_call(value: Any, service: Service) -> tuple[Call | None, list[Issue]]:
    """A call of `service`, or None and everything that is wrong with its form."""
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
            read_prefetch(prefetch or {}, service),
            _authorisation(value.get("fhirAuthorization")),
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
    for name, fits in _AUTHORISATION.items():
        if name not in given:
            if name == "patient":
                continue
            words = f"{name} is missing; send all of {', '.join(_AUTHORISATION)} (patient where it applies)."
            yield _fault("required", "hook-authorization", words, f"fhirAuthorization.{name}")
        elif not fits(given[name]):
            words = f"{name} is not what CDS Hooks says of it."
            yield _fault("value", "hook-authorization", words, f"fhirAuthorization.{name}")


def _authorisation(given: Mapping[str, Any] | None) -> Authorisation | None:
    if given is None:
        return None
    return Authorisation(given["access_token"], given["expires_in"], given["scope"], given.get("patient", ""))


def _short(value: Any) -> bool:
    return isinstance(value, str) and 0 < len(value) <= MAX_TEXT


_AUTHORISATION: Final[Mapping[str, Callable[[Any], bool]]] = MappingProxyType(
    {
        "access_token": lambda value: isinstance(value, str) and bool(_BEARER.fullmatch(value)),
        "token_type": lambda value: bool(value == "Bearer"),
        "expires_in": lambda value: isinstance(value, int) and not isinstance(value, bool),
        "scope": lambda value: isinstance(value, str) and len(value) <= _MAX_SCOPE,
        "subject": _short,
        "patient": lambda value: isinstance(value, str) and bool(_ID.fullmatch(value)),
    }
)


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
