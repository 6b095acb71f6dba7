"""What comes over a FHIR address is judged, named and kept.

Source: FHIR R4 http.html, "create", "update", "conditional create", "conditional update" (a condition that
fits nothing creates, one resource updates, several are refused with 412).
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from types import MappingProxyType
from typing import Any, Final
from urllib.parse import parse_qsl

from sqlalchemy import Connection
from sqlalchemy.exc import IntegrityError
from starlette.responses import Response

from fhirgallop.codes import fhirjson
from fhirgallop.conformance.validator import validate
from fhirgallop.observations.editions import Edition
from fhirgallop.outcome import Issue, has_errors
from fhirgallop.service.answers import RefusalError, refusal
from fhirgallop.service.fhir import body, dates
from fhirgallop.service.fhir.address import KEPT, is_id
from fhirgallop.service.fhir.coded import finding_of, party_key
from fhirgallop.service.fhir.query import MOST_PARAMETERS, Parameters, parse
from fhirgallop.service.fhir.search import matches
from fhirgallop.service.fhir.tokens import own_id, tokens_of
from fhirgallop.storage.keys import encounter_key, patient_key
from fhirgallop.storage.resource_search import Kept, Resources
from fhirgallop.storage.resources import ChangedMeanwhileError, NewVersion

Resource = dict[str, Any]
Also = Callable[[Connection, int], None]

# Issue types by which a resource is no well-formed resource at all; by the others it breaks a rule.
_BASIC: Final = frozenset({"structure", "required", "value", "invalid", "too-long", "extension"})
_IDENTITY: Final = Issue(
    "error", "business-rule", "resource-identity",
    "A resource keeps the urn:uuid identity it was created with; send it with that, or create another.",
)  # fmt: skip
_OF_NOTHING: Final = Issue(
    "error", "business-rule", "provenance-targets",
    "None of the targets is kept here, so that nobody would find this Provenance; send it with its targets.",
    expression="Provenance.target",
)  # fmt: skip
_MOST_TARGETS: Final = 20  # that are looked for
_RACED: Final = Issue(
    "error", "conflict", "resource-raced",
    "Another request changed the same resource at this moment; read it again, then send yours.",
)  # fmt: skip
_TRIES: Final = 4
_DUPLICATE: Final = Issue(
    "error", "duplicate", "resource-duplicate",
    "There is a resource with this identity already; update it, or create with If-None-Exist.",
)  # fmt: skip


class RacedError(RefusalError):
    """Another request was first; the same may be worked out anew from what is there now."""


@dataclass(frozen=True, slots=True)
class Saved:
    """One resource as it stands after a request.

    Attributes:
        kept_as: its id.
        version: its version.
        updated: when that came to be, in ms since 1970.
        body: its text as it is kept.
        created: whether there was none before.
    """

    kept_as: str
    version: int
    updated: int
    body: bytes
    created: bool

    @classmethod
    def before(cls, kept: Kept) -> Saved:
        """A resource that a request left as it was."""
        return cls(kept.fhir_id, kept.version, kept.updated, kept.body, created=False)


class Desk:
    """Takes resources in."""

    def __init__(self, store: Resources, clock: Callable[[], datetime], new_id: Callable[[], str]) -> None:
        self.store: Final = store
        self.clock: Final = clock
        self._new_id = new_id

    def the_one(self, edition: Edition, type_: str, parameters: Parameters) -> Kept | None:
        """The one resource that fits a condition, or None.

        Raises:
            RefusalError: 412 where there are several, or too much is left open; 400 where the condition
                cannot be understood whole.
        """
        query = parse(edition, type_, parameters, strict=True, now=self.clock())
        if has_errors(query.issues):
            raise RefusalError(400, query.issues)
        if not query.narrowed:
            said = "The condition asks for nothing in particular; name an identifier."
            raise refusal(412, "multiple-matches", "condition-empty", said)
        found = matches(self.store, query)
        if len(found) > 1:
            said = "More than one resource fits the condition; name an identifier that only one has."
            raise refusal(412, "multiple-matches", "condition-several", said)
        return found[0] if found else None

    def id_for(self, resource: Resource, before: Kept | None) -> str:
        """The id of a resource that follows `before`, or is new.

        Raises:
            RefusalError: 422 where it changes its identity.
        """
        identity = own_id(resource)
        if before is None:
            return identity or self._new_id()
        if identity != before.fhir_id and (identity or "-" in before.fhir_id):
            raise RefusalError(422, [_IDENTITY])
        return before.fhir_id

    def version(
        self,
        edition: Edition,
        resource: Resource,
        kept_as: str,
        before: Kept | None,
        beside: Mapping[str, NewVersion] = MappingProxyType({}),
    ) -> NewVersion:
        """What to keep of a judged resource: a new one, or one that follows `before`.

        Args:
            edition: FHIR edition.
            resource: judged, with its references turned.
            kept_as: its id.
            before: what it follows.
            beside: what is kept in the same transaction, by address; a Provenance may be of these.
        """
        start, end = dates.of_element(resource) or (None, None)
        patient = party_key(resource.get("subject") or resource.get("patient"), patient_key)
        encounter = party_key(resource.get("encounter"), encounter_key)
        if not patient and resource["resourceType"] == "Provenance":
            patient, encounter = self._of_targets(edition, resource, beside)
        return NewVersion(
            edition, resource["resourceType"], kept_as, patient, encounter, finding_of(resource), start, end,
            body.kept(resource), tokens_of(resource), before.version if before else 0,
        )  # fmt: skip

    def _of_targets(
        self, edition: Edition, provenance: Resource, beside: Mapping[str, NewVersion]
    ) -> tuple[str, str]:
        """Patient and encounter of what a Provenance is about: with them it is found, and deleted."""
        for target in provenance.get("target", ())[:_MOST_TARGETS]:
            address = target.get("reference", "")
            new = beside.get(address)
            if new is not None:
                return new.patient, new.encounter
            type_, _, fhir_id = address.partition("/")
            kept = self.store.read(edition, type_, fhir_id) if type_ in KEPT and is_id(fhir_id) else None
            if kept is not None:
                return kept.patient, kept.encounter
        raise RefusalError(422, [_OF_NOTHING])

    def save(self, versions: Sequence[NewVersion], also: Iterable[Also] = ()) -> list[Saved]:
        """Keeps them all, or none.

        Raises:
            RacedError: another request was first.
            StorageError: the database failed.
        """
        at = dates.ms(self.clock())
        try:
            written = self.store.write(versions, at=at, also=tuple(also))
        except (IntegrityError, ChangedMeanwhileError):
            if all(new.follows == 0 for new in versions):
                raise RacedError(409, [_DUPLICATE]) from None
            raise RacedError(412, [_RACED]) from None
        return [
            Saved(new.fhir_id, now.version, now.updated, new.body, created=new.follows == 0)
            for new, now in zip(versions, written, strict=True)
        ]


def anew(act: Callable[[], Response]) -> Response:
    """What `act` answers; while others are first it looks again at what is there, a few times."""
    for _ in range(_TRIES - 1):
        try:
            return act()
        except RacedError:
            continue
    return act()


def condition(text: str) -> Parameters:
    """The search parameters of a condition as it stands in a header or in an address.

    Raises:
        RefusalError: 400 where it is none.
    """
    try:
        return parse_qsl(text, strict_parsing=True, max_num_fields=MOST_PARAMETERS)
    except ValueError:
        said = "The condition is no list of search parameters such as identifier=system|value."
        raise refusal(400, "value", "condition-malformed", said) from None


def read_resource(text: bytes) -> Resource:
    """The one JSON object of a body.

    Raises:
        RefusalError: 400, with what is wrong with the text.
    """
    value, issues = fhirjson.read(text)
    if has_errors(issues):
        raise RefusalError(400, issues)
    if not isinstance(value, dict):
        raise refusal(400, "structure", "resource-no-object", "The body is no JSON object; send a resource.")
    return value


def judged(resource: Mapping[str, Any], edition: Edition) -> list[Issue]:
    """What the judge notices of a resource that may be kept.

    Raises:
        RefusalError: 400 where it is no well-formed resource, 422 where it breaks a rule.
    """
    issues = validate(resource, edition)
    if has_errors(issues):
        raise as_refusal(issues)
    return issues


def as_refusal(issues: Sequence[Issue]) -> RefusalError:
    """400 where something is no well-formed resource, 422 where it breaks a rule."""
    basic = any(issue.is_error and issue.code in _BASIC for issue in issues)
    return RefusalError(400 if basic else 422, issues)


def of_type(resource: Mapping[str, Any], type_: str) -> None:
    """Refuses a resource that is of another type than its address says."""
    if resource.get("resourceType") != type_:
        text = f"The address is for {type_}, the resource is of another type; send it to its own address."
        raise refusal(400, "invalid", "http-other-type", text)
