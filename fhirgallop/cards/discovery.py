"""The CDS Hooks services on offer: hooks, identifiers, prefetch templates.

Source: CDS Hooks 2.0.1, "Discovery" and "Prefetch Template" (templates use only that edition's tokens:
first-level context fields); hook definitions patient-view 1.0 and encounter-discharge 1.0 of the CDS Hooks
Library; our own in profiles/fhirgallop/hooks/org.fhirgallop.exam-draft.md.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any, Final

SPECIFICATION: Final = "2.0.1"
EXAM_DRAFT: Final = "org.fhirgallop.exam-draft"
_PRACTITIONERS: Final = ("Practitioner", "PractitionerRole")


@dataclass(frozen=True, slots=True)
class Wanted:
    """One prefetch key.

    Attributes:
        query: FHIR read or search, with the tokens of CDS Hooks 2.0.1.
        type: the type of resource read or searched for.
        required: without it there is no evaluation, and the answer is 412.
    """

    query: str
    type: str
    required: bool = False

    @property
    def is_read(self) -> bool:
        """True for a read of one resource, False for a search."""
        return "?" not in self.query


_PATIENT: Final = "{{context.patientId}}"
_CHART: Final[Mapping[str, Wanted]] = MappingProxyType(
    {
        "patient": Wanted(f"Patient/{_PATIENT}", "Patient", required=True),
        "exam": Wanted(
            f"Observation?patient={_PATIENT}&category=exam,vital-signs&_sort=-date&_count=200",
            "Observation",
            required=True,
        ),
        "results": Wanted(
            f"Observation?patient={_PATIENT}&category=procedure,imaging,laboratory,survey"
            "&_sort=-date&_count=200",
            "Observation",
        ),
        "reports": Wanted(f"DiagnosticReport?patient={_PATIENT}&_sort=-date&_count=50", "DiagnosticReport"),
        "conditions": Wanted(f"Condition?patient={_PATIENT}&_count=200", "Condition"),
        "procedures": Wanted(f"Procedure?patient={_PATIENT}&_count=100", "Procedure"),
        "devices": Wanted(f"Device?patient={_PATIENT}&_count=50", "Device"),
    }
)
# The draft brings today's examination; what was examined before is welcome and not needed.
_DRAFT_CHART: Final[Mapping[str, Wanted]] = MappingProxyType(
    {**_CHART, "exam": Wanted(_CHART["exam"].query, "Observation")}
)


@dataclass(frozen=True, slots=True)
class Service:
    """One service.

    Attributes:
        id: last part of its address.
        hook: the hook it answers to.
        hook_version: version of the hook's definition.
        users: resource types that `context.userId` may name.
        needs_encounter: whether `context.encounterId` is required by the hook.
        takes_draft: whether the context brings a draft examination.
        prefetch: what it asks for.
    """

    id: str
    hook: str
    hook_version: str
    title: str
    description: str
    users: tuple[str, ...]
    needs_encounter: bool
    takes_draft: bool
    prefetch: Mapping[str, Wanted]

    @property
    def usage(self) -> str:
        """What a client must know before it uses the service."""
        needed = " and ".join(f"'{key}'" for key, wanted in self.prefetch.items() if wanted.required)
        return (
            "Send the prefetch. A key that is absent, and further pages, are read from fhirServer only where "
            "the site has listed that server, with the scopes of fhirAuthorization, within moments. "
            f"{needed} must be known (null or an empty searchset where there is nothing), or the answer is "
            "412; what else is unknown stays unknown, and the cards say so. FHIR R4, R4B or R5 resources. "
            "Cards are for clinicians: for a user who is none, the answer is empty. Support for clinical "
            "judgement, not a replacement for it; an empty answer is no reassurance."
        )

    def as_dict(self) -> dict[str, Any]:
        """The service as discovery lists it."""
        return {
            "hook": self.hook,
            "id": self.id,
            "title": self.title,
            "description": self.description,
            "prefetch": {key: wanted.query for key, wanted in self.prefetch.items()},
            "usageRequirements": self.usage,
            # members of CDS Hooks 3.0; a 2.0 client does not look at them
            "version": SPECIFICATION,
            "hookVersion": self.hook_version,
        }


_TITLE: Final = "Heart examination review"
SERVICES: Final[tuple[Service, ...]] = (
    Service(
        "exam-review-patient-view",
        "patient-view",
        "1.0",
        _TITLE,
        "Holds today's heart examination against the chart when the chart is opened: which entries do not "
        "usually go together, and what to listen to or record again.",
        (*_PRACTITIONERS, "Patient", "RelatedPerson"),
        needs_encounter=False,
        takes_draft=False,
        prefetch=_CHART,
    ),
    Service(
        "exam-review-encounter-discharge",
        "encounter-discharge",
        "1.0",
        f"{_TITLE} before discharge",
        "Holds this encounter's heart examination against the chart before the patient leaves.",
        _PRACTITIONERS,
        needs_encounter=True,
        takes_draft=False,
        prefetch=_CHART,
    ),
    Service(
        "exam-review-draft",
        EXAM_DRAFT,
        "0.1.0",
        f"{_TITLE} while it is written",
        "Holds a draft examination, not yet signed, against the chart.",
        _PRACTITIONERS,
        needs_encounter=False,
        takes_draft=True,
        prefetch=_DRAFT_CHART,
    ),
)


def find(id_: str) -> Service | None:
    """The service with that id."""
    return next((service for service in SERVICES if service.id == id_), None)


def discovery() -> dict[str, Any]:
    """The answer to `GET /cds-services`."""
    return {"services": [service.as_dict() for service in SERVICES]}
