"""Create and update, conditional or not, as answers.

Source: FHIR R4 http.html, "create", "update", and their conditional forms; "Prefer".
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

from fastapi import Request
from starlette.responses import Response

from fhirgallop.codes import fhirjson
from fhirgallop.outcome import Issue, operation_outcome
from fhirgallop.service import audit
from fhirgallop.service.answers import refusal
from fhirgallop.service.auth.caller import Caller, forbidden
from fhirgallop.service.fhir import body
from fhirgallop.service.fhir.address import Base, is_id, not_found
from fhirgallop.service.fhir.conditions import expected_version, stale, version_headers
from fhirgallop.service.fhir.interactions import answer, desk, seen
from fhirgallop.service.fhir.negotiation import Wish
from fhirgallop.service.fhir.query import Parameters
from fhirgallop.service.fhir.writing import Resource, Saved, anew, condition, judged, of_type
from fhirgallop.storage.resource_search import Kept

_NO_UPSERT: Final = (
    "There is no resource of this id here, and ids are given out by this server; create it, or update it by "
    "its identifier (PUT Type?identifier=system|value)."
)


@dataclass(frozen=True, slots=True)
class Sent:
    """One resource that came over a FHIR address.

    Attributes:
        base: the edition's base.
        type: the type its address names.
        resource: as sent.
    """

    base: Base
    type: str
    resource: Resource


def create(request: Request, wish: Wish, sent: Sent, unless: str | None) -> Response:
    """A new resource; nothing where the condition (If-None-Exist) is met by one already."""
    return anew(lambda: _create(request, wish, sent, unless))


def _create(request: Request, wish: Wish, sent: Sent, unless: str | None) -> Response:
    existing = met(request, sent, condition(unless) if unless is not None else None)
    if existing is None:
        return _save(request, wish, sent, None)
    audit.about(request, action="R", interaction="create", patients=[existing.patient],
                entities=[f"{sent.type}/{existing.fhir_id}"])  # fmt: skip
    return _saved(wish, sent, Saved.before(existing), [])


def update(request: Request, wish: Wish, sent: Sent, fhir_id: str) -> Response:
    """The next version of a resource."""
    wanted = request.headers.get("if-match")
    return anew(lambda: _save(request, wish, sent, known(request, sent, fhir_id, wanted)))


def update_found(request: Request, wish: Wish, sent: Sent, parameters: Parameters) -> Response:
    """The next version of the one resource that fits; a new one where none does."""
    wanted = request.headers.get("if-match")
    return anew(lambda: _save(request, wish, sent, fitting(request, sent, parameters, wanted)))


def met(request: Request, sent: Sent, parameters: Parameters | None) -> Kept | None:
    """What meets the condition of a create already, so that nothing is created."""
    of_type(sent.resource, sent.type)
    _within(request, sent, "c")
    if parameters is None:
        return None
    found = desk(request).the_one(sent.base.edition, sent.type, parameters)
    return None if found is None else seen(request, found, "s")


def known(request: Request, sent: Sent, fhir_id: str, if_match: str | None) -> Kept:
    """What an update changes; 405 where there is nothing of that id."""
    of_type(sent.resource, sent.type)
    if sent.resource.get("id") != fhir_id:
        text = "The resource's id is not that of its address; send it with the same id."
        raise refusal(400, "value", "http-other-id", text)
    _within(request, sent, "u")
    store = desk(request).store
    before = store.read(sent.base.edition, sent.type, fhir_id) if is_id(fhir_id) else None
    if before is None:
        if not request.state.caller.reach(sent.type, "u").everything:
            raise not_found()  # the same as for what may not be seen
        raise refusal(405, "not-supported", "update-unknown", _NO_UPSERT)
    return _expected(if_match, seen(request, before, "u"))


def fitting(request: Request, sent: Sent, parameters: Parameters, if_match: str | None) -> Kept | None:
    """What a conditional update changes; None where it creates."""
    of_type(sent.resource, sent.type)
    _within(request, sent, "u")
    caller: Caller = request.state.caller
    before = desk(request).the_one(sent.base.edition, sent.type, parameters)
    own = sent.resource.get("id")
    if before is not None:
        if own is not None and own != before.fhir_id:
            text = "The resource's id is not that of the one that fits the condition; leave the id out."
            raise refusal(400, "value", "http-other-id", text)
        return _expected(if_match, seen(request, before, "u"))
    if own is not None:
        raise refusal(405, "not-supported", "update-unknown", _NO_UPSERT)
    if not caller.may(sent.type, "c", sent.resource):
        raise forbidden()
    return None


def _within(request: Request, sent: Sent, does: str) -> None:
    caller: Caller = request.state.caller
    if not caller.may(sent.type, does, sent.resource):
        raise forbidden()


def _expected(header: str | None, before: Kept) -> Kept:
    wanted = expected_version(header)
    if wanted is not None and wanted != str(before.version):
        raise stale()
    return before


def _save(request: Request, wish: Wish, sent: Sent, before: Kept | None) -> Response:
    issues = judged(sent.resource, sent.base.edition)
    keeper = desk(request)
    new = keeper.version(sent.base.edition, sent.resource, keeper.id_for(sent.resource, before), before)
    audit.about(
        request, action="U" if before else "C", interaction="update" if before else "create",
        patients=[new.patient], entities=[f"{sent.type}/{new.fhir_id}"],
    )  # fmt: skip
    (saved,) = keeper.save([new], [audit.kept(request)])
    return _saved(wish, sent, saved, issues)


def _saved(wish: Wish, sent: Sent, saved: Saved, issues: list[Issue]) -> Response:
    """201 or 200, with what Prefer asks for: the resource unless something else is."""
    headers = version_headers(saved.version, saved.updated)
    headers["Location"] = sent.base.of(sent.type, saved.kept_as, saved.version)
    status = 201 if saved.created else 200
    if wish.back == "minimal":
        return Response(status_code=status, headers=headers)
    text = body.given(sent.type, saved.kept_as, saved.version, saved.updated, saved.body)
    if wish.back == "OperationOutcome":
        text = fhirjson.write(operation_outcome(issues, all_well="Kept."))
    return answer(wish, text, status, headers)
