"""One entry of a transaction or batch: what it asks for, and what it meets."""

from __future__ import annotations

import re
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from typing import Any, Final

from fastapi import Request

from fhirgallop.service.answers import RefusalError, refusal
from fhirgallop.service.auth.caller import forbidden
from fhirgallop.service.fhir.address import KEPT, Base, known_type
from fhirgallop.service.fhir.changes import Sent, fitting, known, met
from fhirgallop.service.fhir.interactions import desk
from fhirgallop.service.fhir.writing import condition
from fhirgallop.storage.resource_search import Kept

_ADDRESS: Final = re.compile(
    r"(?P<type>[A-Za-z]{1,64})"
    r"(?:/(?P<id>[A-Za-z0-9\-.]{1,64})(?:/_history/(?P<version>[0-9]{1,9}))?)?(?:\?(?P<query>.{1,4000}))?",
    re.ASCII,
)
_METHODS: Final = ("POST", "PUT", "GET")


@dataclass(frozen=True, slots=True)
class Step:
    """One entry.

    Attributes:
        number: its place, from 0.
        method: POST, PUT or GET.
        type: resource type of its address.
        fhir_id: id of its address; empty for none.
        version: version of its address; empty for none.
        query: what follows the question mark; empty for nothing.
        full_url: its name within the Bundle; empty for none.
        unless: its ifNoneExist; None without.
        if_match: its ifMatch; None without.
        sent: the resource; None where it has none.
        before: what there is already, after it was looked for.
        kept_as: the id that the resource has, after that.
        settled: True where the condition of a create is met already.
    """

    number: int
    method: str
    type: str
    fhir_id: str
    version: str
    query: str
    full_url: str
    unless: str | None
    if_match: str | None
    sent: Sent | None
    before: Kept | None = None
    kept_as: str = ""
    settled: bool = False


def step_of(number: int, entry: dict[str, Any], base: Base) -> Step:
    """What an entry asks for, as it is written."""
    asked = entry.get("request")
    if not isinstance(asked, dict):
        raise refusal(400, "required", "bundle-request", "The entry says not what is to be done (request).")
    method, url = asked.get("method"), str(asked.get("url", ""))
    if method not in _METHODS:
        text = f"This method is not served in a Bundle; there are {', '.join(_METHODS)}."
        raise refusal(405, "not-supported", "bundle-method", text)
    found = _ADDRESS.fullmatch(url.removeprefix(f"{base.url}/"))
    if found is None:
        raise refusal(400, "value", "bundle-url", "The request's url is no address of a resource or search.")
    known_type(base.edition, found["type"], among=KEPT)
    sent = None
    if method != "GET":
        resource = entry.get("resource")
        if not isinstance(resource, dict):
            raise refusal(400, "required", "bundle-resource", "The entry has no resource to be kept.")
        sent = Sent(base, found["type"], resource)
    return Step(
        number, str(method), found["type"], found["id"] or "", found["version"] or "", found["query"] or "",
        str(entry.get("fullUrl", "")), asked.get("ifNoneExist"), asked.get("ifMatch"), sent,
    )  # fmt: skip


def located(request: Request, step: Step) -> Step:
    """The step with what there is already; refused where the caller may not do it."""
    caller = request.state.caller
    if step.sent is None:
        if not caller.may(step.type, "r" if step.fhir_id else "s"):
            raise forbidden()
        return step
    if not caller.may(step.type, "c" if step.method == "POST" else "u"):
        raise forbidden()
    if step.method == "POST":
        if step.fhir_id or step.query:
            raise refusal(400, "value", "bundle-url", "A POST names the resource type alone.")
        before = met(request, step.sent, condition(step.unless) if step.unless is not None else None)
        if before is not None:
            return replace(step, before=before, kept_as=before.fhir_id, settled=True)
    elif step.fhir_id:
        before = known(request, step.sent, step.fhir_id, step.if_match)
    else:
        before = fitting(request, step.sent, condition(step.query), step.if_match)
    return replace(step, before=before, kept_as=desk(request).id_for(step.sent.resource, before))


@contextmanager
def placed(number: int) -> Iterator[None]:
    """Says of a refusal which entry it is about."""
    try:
        yield
    except RefusalError as error:
        raise at_entry(number, error) from None


def at_entry(number: int, error: RefusalError) -> RefusalError:
    """The same refusal, with the entry as the place of what has none."""
    place = f"Bundle.entry[{number}]"
    issues = [issue if issue.expression else replace(issue, expression=place) for issue in error.issues]
    return RefusalError(error.status, issues, error.headers)
