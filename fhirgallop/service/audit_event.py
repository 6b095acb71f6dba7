"""An access to patients' data as a FHIR R4 AuditEvent.

Sources: FHIR R4 AuditEvent; IHE Basic Audit Log Patterns 1.1.3 (BALP), section 3:5.7: RESTful activities, and
OAuth tokens of which only a part may be kept. Where BALP would name the patient, the digest stands by which
the rest of the database knows the patient: the trail can be asked for a patient, and names none.
"""

from __future__ import annotations

import base64
from collections.abc import Iterable
from dataclasses import dataclass
from datetime import datetime
from typing import Any, Final, Literal

from fhirgallop.codes import systems
from fhirgallop.observations.bundle import instant
from fhirgallop.outcome import Issue, operation_outcome
from fhirgallop.version import VERSION

Action = Literal["C", "R", "U", "D", "E"]

PATIENT_DIGEST: Final = systems.BASE + "/patient-digest"

_INTERACTIONS: Final = "http://hl7.org/fhir/restful-interaction"
_DICOM: Final = "http://dicom.nema.org/resources/ontology/DCM"
_BALP: Final = "https://profiles.ihe.net/ITI/BALP/CodeSystem/"
_ENTITY: Final = "http://terminology.hl7.org/CodeSystem/audit-entity-type"
_ROLE: Final = "http://terminology.hl7.org/CodeSystem/object-role"
_REST: Final = {
    "system": "http://terminology.hl7.org/CodeSystem/audit-event-type",
    "code": "rest",
    "display": "RESTful Operation",
}
_SIGN_IN: Final = {"system": _DICOM, "code": "110114", "display": "User Authentication"}
_SENDER: Final = {"system": _DICOM, "code": "110153", "display": "Source Role ID"}
_RECEIVER: Final = {"system": _DICOM, "code": "110152", "display": "Destination Role ID"}
_USER: Final = {
    "system": "http://terminology.hl7.org/CodeSystem/v3-ParticipationType",
    "code": "IRCP",
    "display": "information recipient",
}
_TOKEN: Final = {"system": _BALP + "UserAgentTypes", "code": "UserOauthAgent"}
_SERVER: Final = {"display": f"fhirgallop {VERSION}"}
_SOURCE: Final = {
    "observer": _SERVER,
    "type": [
        {
            "system": "http://terminology.hl7.org/CodeSystem/security-source-type",
            "code": "4",
            "display": "Application Server",
        }
    ],
}
_TOLD: Final = 20


@dataclass(frozen=True, slots=True)
class Who:
    """Who asked, from where.

    Attributes:
        name: issuer, client id or subject; empty where nobody had to say who they are.
        person: whether that is a user, and not a program.
        token: id of the token, or the end of an opaque one; empty where there was none.
        address: network address of the client.
    """

    name: str = ""
    person: bool = False
    token: str = ""
    address: str = ""


@dataclass(frozen=True, slots=True)
class Deed:
    """What was done.

    Attributes:
        action: C create, R read, U update, D delete, E execute.
        interaction: code of FHIR's RESTful interactions.
        patients: digests of the patients whose data were touched (one event is made for each).
        entities: what else was touched: `Type/id`, `urn:uuid:...`, or words.
        parameters: names of a search's parameters; their values may name a patient.
        receiver: who got the data, where this program was the client; empty where it was asked.
    """

    action: Action
    interaction: str
    patients: tuple[str, ...] = ()
    entities: tuple[str, ...] = ()
    parameters: tuple[str, ...] = ()
    receiver: str = ""


@dataclass(frozen=True, slots=True)
class Ending:
    """How it came out: HTTP status, and the issues of a refusal."""

    status: int = 200
    issues: tuple[Issue, ...] = ()


def audit_event(
    deed: Deed, who: Who, ending: Ending, *, at: datetime, id_: str, request: str, patient: str = ""
) -> dict[str, Any]:
    """The event of one deed, as far as it concerns one patient.

    Args:
        deed: what was done.
        who: by whom.
        ending: how it came out.
        at: when it was recorded.
        id_: id of the event.
        request: value of X-Request-Id; empty where no request was behind it.
        patient: digest of the patient, one of the deed's.
    """
    sign_in = ending.status == 401
    event: dict[str, Any] = {"resourceType": "AuditEvent", "id": id_}
    if ending.issues:
        event["contained"] = [{**operation_outcome(map(_bare, ending.issues[:_TOLD])), "id": "outcome"}]
    event["type"] = _SIGN_IN if sign_in else _REST
    event["subtype"] = [{"system": _INTERACTIONS, "code": deed.interaction}]
    event["action"] = "E" if sign_in else deed.action
    event["recorded"] = instant(at)
    event["outcome"] = "0" if ending.status < 400 else "4" if ending.status < 500 else "8"
    if ending.status >= 400:
        event["outcomeDesc"] = f"HTTP {ending.status}"
    event["agent"] = list(_agents(deed, who))
    event["source"] = _SOURCE
    event["entity"] = list(_entities(deed, ending, request, patient))
    return event


def _bare(issue: Issue) -> Issue:
    """The issue by its codes alone: a trail that is kept for years holds no texts of the day."""
    return Issue(issue.severity, issue.code, issue.rule, issue.rule)


def _agents(deed: Deed, who: Who) -> Iterable[dict[str, Any]]:
    """Client, server, and the user or token behind the client; just one of them is the requestor."""
    if deed.receiver:
        yield {"type": {"coding": [_SENDER]}, "who": _SERVER, "requestor": True}
        yield {"type": {"coding": [_RECEIVER]}, "who": _named(deed.receiver), "requestor": False}
        return
    reads = deed.action == "R"
    client: dict[str, Any] = {
        "type": {"coding": [_RECEIVER if reads else _SENDER]},
        "who": _named(who.name) if who.name and not who.person else {"display": "client"},
        "requestor": not (who.person or who.token),
    }
    if who.address:
        client["network"] = {"address": who.address, "type": "2"}
    yield client
    yield {
        "type": {"coding": [_SENDER if reads else _RECEIVER]},
        "who": _SERVER,
        "requestor": False,
    }
    if who.person:
        user: dict[str, Any] = {"type": {"coding": [_USER]}, "who": _named(who.name), "requestor": True}
        if who.token:
            user["policy"] = [who.token]
        yield user
    elif who.token:
        yield {"type": {"coding": [_TOKEN]}, "requestor": True, "policy": [who.token]}


def _entities(deed: Deed, ending: Ending, request: str, patient: str) -> Iterable[dict[str, Any]]:
    if patient:
        yield {
            "what": {"identifier": {"system": PATIENT_DIGEST, "value": patient}},
            "type": _coding(_ENTITY, "1", "Person"),
            "role": _coding(_ROLE, "1", "Patient"),
        }
    for entity in deed.entities:
        yield {
            "what": _what(entity),
            "type": _coding(_ENTITY, "2", "System Object"),
            "role": _coding(_ROLE, "4", "Domain Resource"),
        }
    if deed.parameters:
        names = "&".join(f"{name}=" for name in deed.parameters)
        yield {
            "type": _coding(_ENTITY, "2", "System Object"),
            "role": _coding(_ROLE, "24", "Query"),
            "query": base64.b64encode(names.encode("utf-8", "replace")).decode(),
        }
    if ending.issues:
        yield {"what": {"reference": "#outcome"}, "type": _coding(_ENTITY, "2", "System Object")}
    if request:
        yield {
            "what": {"identifier": {"value": request}},
            "type": {"system": _BALP + "BasicAuditEntityType", "code": "XrequestId"},
        }


def _coding(system: str, code: str, display: str) -> dict[str, str]:
    return {"system": system, "code": code, "display": display}


def _named(name: str) -> dict[str, Any]:
    return {"identifier": {"value": name}}


def _what(entity: str) -> dict[str, Any]:
    if entity.startswith("urn:uuid:"):
        return {"identifier": {"system": "urn:ietf:rfc:3986", "value": entity}}
    type_, _, id_ = entity.partition("/")
    return {"reference": entity} if id_ and type_.isalpha() else {"display": entity}
