"""What a client sent along with a call, held against the service's template; what is still to be fetched.

Source: CDS Hooks 2.0.1, "Prefetch Template". null and an empty searchset say that there are no data. A key
that is absent says nothing and may be fetched; an OperationOutcome says that the client failed, and is not
asked again; a resource of another type says nothing either.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from enum import Enum
from types import MappingProxyType
from typing import Any, Final
from urllib.parse import quote

from fhirgallop.cards.discovery import Service, Wanted
from fhirgallop.outcome import Issue

# Members that only STU3 or DSTU2 resources have; R4 and later name them otherwise.
_OLD_MEMBERS: Final[Mapping[str, tuple[str, ...]]] = MappingProxyType(
    {
        "Observation": ("comment", "comments", "related", "context"),
        "Condition": ("context", "dateRecorded"),
        "Procedure": ("context", "notPerformed", "notDone"),
        "DiagnosticReport": ("context", "codedDiagnosis"),
        "Encounter": ("indication",),
    }
)
_TOKEN: Final = re.compile(r"\{\{context\.([A-Za-z]{1,40})\}\}")
_PARTS: Final = {
    "patient": "the patient's own record",
    "exam": "earlier examinations",
    "results": "results (tracings, imaging, laboratory)",
    "reports": "reports",
    "conditions": "the problem list",
    "procedures": "procedures",
    "devices": "devices",
}


class Lack(Enum):
    """Why a key says nothing, in the words of a card."""

    NOT_SENT = "not sent"
    FAILED = "not to be had by the record system"
    OTHERWISE = "not sent as asked for"
    LATE = "not fetched in time"
    FORBIDDEN = "not permitted to be fetched"
    UNFETCHED = "could not be fetched"
    IN_PART = "permitted in part only"


@dataclass(frozen=True, slots=True)
class Prefetch:
    """The data of one call.

    Attributes:
        usable: what was sent or fetched and can be read, by key; None where there are no data.
        lacks: the keys that are unknown, or known in part, and why.
    """

    usable: Mapping[str, Any]
    lacks: Mapping[str, Lack]

    @property
    def absent(self) -> tuple[str, ...]:
        """Keys that the client left to the service."""
        return tuple(key for key, lack in self.lacks.items() if lack is Lack.NOT_SENT)

    @property
    def paged(self) -> tuple[str, ...]:
        """Keys with further pages that were not sent."""
        return tuple(key for key, value in self.usable.items() if next_page(value))

    def knowing(self, found: Mapping[str, Any], lacks: Mapping[str, Lack]) -> Prefetch:
        """The same with what was fetched; `lacks` of a key that was found says that it is known in part."""
        left = {key: lack for key, lack in self.lacks.items() if key not in found}
        return replace(self, usable={**self.usable, **found}, lacks={**left, **lacks})

    def gaps(self) -> list[str]:
        """What stays unknown, in words, one line for each reason."""
        by_reason: dict[Lack, list[str]] = {}
        for key, lack in self.lacks.items():
            by_reason.setdefault(lack, []).append(_PARTS.get(key, key))
        return [f"{lack.value}: {', '.join(by_reason[lack])}" for lack in Lack if lack in by_reason]


def read_prefetch(sent: Mapping[str, Any], service: Service) -> Prefetch:
    """What can be used of what was sent; keys that were not asked for are ignored."""
    usable: dict[str, Any] = {}
    lacks: dict[str, Lack] = {}
    for key, wanted in service.prefetch.items():
        if key not in sent:
            lacks[key] = Lack.NOT_SENT
        elif sent[key] is None or as_asked(sent[key], wanted):
            usable[key] = sent[key]
        else:
            lacks[key] = Lack.FAILED if _type(sent[key]) == "OperationOutcome" else Lack.OTHERWISE
    return Prefetch(usable, lacks)


def as_asked(value: Any, wanted: Wanted) -> bool:
    """Whether a value is what the template asks for: the resource of a read, the Bundle of a search."""
    if wanted.is_read:
        return bool(_type(value) == wanted.type)
    return _type(value) == "Bundle" and value.get("type", "searchset") in ("searchset", "collection")


def query(wanted: Wanted, context: Mapping[str, str]) -> str:
    """The template with its tokens replaced: an address below the server's base."""
    return _TOKEN.sub(lambda found: quote(context[found[1]], safe=""), wanted.query)


def next_page(value: Any) -> str:
    """Address of the page that follows a Bundle; empty when there is none."""
    links = value.get("link") if _type(value) == "Bundle" else None
    for link in links if isinstance(links, list) else ():
        if isinstance(link, dict) and link.get("relation") == "next":
            url = link.get("url")
            return url if isinstance(url, str) else ""
    return ""


def joined(pages: Sequence[Mapping[str, Any]]) -> dict[str, Any]:
    """Pages of one search as one Bundle; where a page is still to come, its link says so."""
    entries = [
        entry for page in pages for entry in (page["entry"] if isinstance(page.get("entry"), list) else ())
    ]
    link = [{"relation": "next", "url": url}] if (url := next_page(pages[-1])) else []
    return {"resourceType": "Bundle", "type": "searchset", "link": link, "entry": entries}


def faults(prefetch: Prefetch, service: Service, patient: str, draft: Any) -> Iterator[Issue]:
    """What keeps the call from being evaluated: data missing (`incomplete`), old, or another patient's."""
    for key, lack in prefetch.lacks.items():
        if service.prefetch[key].required and key not in prefetch.usable:
            words = (
                f"The prefetch key {key} is needed and is unknown: {lack.value}. Send it as its template "
                "asks; null or an empty searchset where there are no data."
            )
            yield Issue("error", "incomplete", "hook-prefetch-missing", words, field=f"prefetch.{key}")
    for key, value in {**prefetch.usable, "draftObservations": draft}.items():
        if any(_is_old(resource) for resource in _resources(value)):
            words = f"The resources in {key} are of FHIR STU3 or DSTU2; send R4, R4B or R5."
            yield Issue("error", "incomplete", "hook-old-fhir", words, field=key)
    sent = prefetch.usable.get("patient")
    if sent is not None and sent.get("id") != patient:
        words = "The Patient in the prefetch is another one than context.patientId; nothing was evaluated."
        yield Issue("error", "business-rule", "hook-other-patient", words, field="prefetch.patient")


def _type(value: Any) -> Any:
    return value.get("resourceType") if isinstance(value, dict) else None


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
