"""Tells a receiver where a run's manifest lies, in the shape of `$bulk-submit`; it fetches the files itself.

Source: HL7 Bulk Data Access 4.0.0-ballot, operation `$bulk-submit`. That a status is a Coding of
http://hl7.org/fhir/event-status is written from memory of the ballot.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final, Literal
from urllib.parse import urlsplit

from fhirgallop.bulk.wish import BulkError
from fhirgallop.codes import fhirjson
from fhirgallop.delivery.client import Client

Status = Literal["in-progress", "completed", "stopped"]

SCOPE: Final = "system/bulk-submit"
_FORMAT: Final = "application/fhir+ndjson"
_STATUS_SYSTEM: Final = "http://hl7.org/fhir/event-status"


@dataclass(frozen=True, slots=True)
class Submission:
    """What a receiver is told.

    Attributes:
        submitter: system and value of the identifier that both sides know us by.
        number: the submission's number, ours; the same in every request about it.
        status: in-progress while more may follow; completed; or stopped: what was taken is to be deleted.
        manifest: address of manifest.json; empty where only the status is told.
        base: FHIR base address that references are relative to; needed with a manifest.
        replaces: address of the manifest that this one stands in for; empty for none.
    """

    submitter: tuple[str, str]
    number: str
    status: Status
    manifest: str = ""
    base: str = ""
    replaces: str = ""


def parameters(submission: Submission) -> dict[str, Any]:
    """The Parameters resource.

    Raises:
        BulkError: what goes together is not there together.
    """
    if not submission.number or not all(submission.submitter):
        raise BulkError("a submission needs its number, and the system and value of its submitter")
    if submission.manifest and not submission.base:
        raise BulkError("a manifest needs the FHIR base address that its references are relative to")
    if submission.replaces and not submission.manifest:
        raise BulkError("only a manifest can stand in for another; name it")
    for address in (submission.manifest, submission.base, submission.replaces):
        if address and urlsplit(address).scheme not in ("http", "https"):
            raise BulkError("addresses of a submission are absolute, with https")
    system, value = submission.submitter
    parts: list[dict[str, Any]] = [
        {"name": "submitter", "valueIdentifier": {"system": system, "value": value}},
        {"name": "submissionId", "valueString": submission.number},
        {"name": "submissionStatus", "valueCoding": {"system": _STATUS_SYSTEM, "code": submission.status}},
    ]
    if submission.manifest:
        parts += [
            {"name": "manifestUrl", "valueUrl": submission.manifest},
            {"name": "fhirBaseUrl", "valueUrl": submission.base},
            {"name": "outputFormat", "valueCode": _FORMAT},
        ]
    if submission.replaces:
        parts.append({"name": "replacesManifestUrl", "valueUrl": submission.replaces})
    return {"resourceType": "Parameters", "parameter": parts}


def hand_over(client: Client, receiver: str, submission: Submission, token: str = "") -> None:
    """Sends one request to the receiver.

    Args:
        client: one that may speak to the receiver.
        receiver: its FHIR base address.
        submission: what it is told.
        token: access token with the scope `SCOPE`; none is sent when empty.

    Raises:
        BulkError: the submission cannot be, or the receiver does not take it.
        ClientError: there was no answer.
    """
    headers = {"content-type": "application/fhir+json", "accept": "application/fhir+json"}
    if token:
        headers["authorization"] = f"Bearer {token}"
    body = fhirjson.write(parameters(submission))
    answer = client.send("POST", f"{receiver.rstrip('/')}/$bulk-submit", headers=headers, body=body)
    if not 200 <= answer.status < 300:
        raise BulkError(f"the receiver answered {answer.status} and did not take the submission")
