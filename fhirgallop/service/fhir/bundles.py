"""Transaction and batch: many interactions in one request, all or none of them, or each for itself.

Source: FHIR R4 http.html, "batch/transaction" (order of processing, matching of references, conditional
references, what the response holds).
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from http import HTTPStatus
from typing import Any, Final

import msgspec
from fastapi import Request
from starlette.responses import Response

from fhirgallop.codes import fhirjson
from fhirgallop.conformance.registry import registry
from fhirgallop.conformance.validator import validate
from fhirgallop.outcome import Issue, has_errors, operation_outcome
from fhirgallop.service import audit
from fhirgallop.service.answers import RefusalError, refusal
from fhirgallop.service.fhir import body, dates
from fhirgallop.service.fhir.address import KEPT, Base, is_id, known_type, version_number
from fhirgallop.service.fhir.conditions import etag
from fhirgallop.service.fhir.interactions import answer, desk, seen
from fhirgallop.service.fhir.negotiation import Wish
from fhirgallop.service.fhir.query import parse
from fhirgallop.service.fhir.rewriting import Rewriter
from fhirgallop.service.fhir.search import run, searchset
from fhirgallop.service.fhir.steps import Step, at_entry, located, placed, step_of
from fhirgallop.service.fhir.writing import Saved, anew, as_refusal, condition, judged
from fhirgallop.storage.resources import NewVersion

MOST_ENTRIES: Final = 1000
_IN_RESOURCE: Final = re.compile(r"Bundle\.entry\[([0-9]{1,9})\]\.resource\b", re.ASCII)


def answered(request: Request, wish: Wish, base: Base, bundle: dict[str, Any]) -> Response:
    """The response to a transaction or a batch."""
    if bundle.get("resourceType") != "Bundle" or bundle.get("type") not in ("transaction", "batch"):
        text = "This address takes a Bundle of type transaction or batch; send other resources to their own."
        raise refusal(400, "invalid", "bundle-type", text)
    entries = bundle.get("entry", [])
    if isinstance(entries, list) and len(entries) > MOST_ENTRIES:
        text = f"A Bundle may have {MOST_ENTRIES} entries; send fewer at a time."
        raise refusal(413, "too-costly", "bundle-too-many", text)
    if bundle["type"] == "batch":
        wrong = _batched(bundle, base)
        return _response(wish, "batch", _batch(request, wish, base, entries, wrong))
    judged(bundle, base.edition)
    return anew(lambda: _response(wish, "transaction", _transaction(request, wish, base, entries)))


def _response(wish: Wish, kind: str, told: list[dict[str, Any]]) -> Response:
    response: dict[str, Any] = {"resourceType": "Bundle", "type": f"{kind}-response"}
    if told:
        response["entry"] = told
    return answer(wish, fhirjson.write(response))


def _batched(bundle: dict[str, Any], base: Base) -> dict[int, list[Issue]]:
    """What is wrong with each entry; a batch is refused whole only where the Bundle itself is none."""
    by_entry: dict[int, list[Issue]] = {}
    outside: list[Issue] = []
    for issue in validate(bundle, base.edition):
        found = _IN_RESOURCE.match(issue.expression)
        (by_entry.setdefault(int(found[1]), []) if found else outside).append(issue)
    if has_errors(outside):
        raise as_refusal(outside)
    return by_entry


def _transaction(
    request: Request, wish: Wish, base: Base, entries: Sequence[dict[str, Any]]
) -> list[dict[str, Any]]:
    steps: list[Step] = []
    for number, entry in enumerate(entries):
        with placed(number):
            steps.append(located(request, step_of(number, entry, base)))
    _apart(steps)
    names = {step.full_url: f"{step.type}/{step.kept_as}" for step in steps if step.full_url and step.kept_as}
    reads = [step for step in steps if step.method == "GET"]
    for step in reads:  # one that fails takes the writes along, so it is tried before them
        with placed(step.number):
            _got(request, base, step)
    told = _written(request, wish, base, steps, names.get)
    told |= {step.number: _got(request, base, step) for step in reads}
    return [told[step.number] for step in steps]


def _batch(
    request: Request,
    wish: Wish,
    base: Base,
    entries: Sequence[dict[str, Any]],
    wrong: Mapping[int, list[Issue]],
) -> list[dict[str, Any]]:
    told: list[dict[str, Any]] = []
    urls = {url for entry in entries if isinstance(url := entry.get("fullUrl"), str)}

    def lonely(name: str) -> str | None:
        if name in urls:
            said = "Entries of a batch do not depend on each other; send a transaction."
            raise refusal(400, "invalid", "batch-dependent", said)
        return None

    for number, entry in enumerate(entries):
        try:
            step = located(request, step_of(number, entry, base))
            if step.method == "GET":
                told.append(_got(request, base, step))
                continue
            if not step.settled and has_errors(wrong.get(number, ())):
                raise as_refusal(wrong[number])
            told.append(_written(request, wish, base, [step], lonely)[number])
        except RefusalError as error:
            outcome = operation_outcome(error.issues)
            told.append({"response": {"status": _status(error.status), "outcome": outcome}})
    return told


def _apart(steps: Sequence[Step]) -> None:
    """Refuses a transaction in which two entries mean the same resource."""
    seen_: set[tuple[str, str]] = set()
    urls: set[str] = set()
    for step in steps:
        one = (step.type, step.kept_as)
        if (step.kept_as and one in seen_) or (step.full_url and step.full_url in urls):
            text = "Two entries of a transaction mean the same resource; send it once."
            raise at_entry(step.number, refusal(400, "invalid", "transaction-overlap", text))
        seen_.add(one)
        urls.add(step.full_url)


def _written(
    request: Request, wish: Wish, base: Base, steps: Sequence[Step], renamed: Callable[[str], str | None]
) -> dict[int, dict[str, Any]]:
    """Keeps what the steps bring, in one database transaction; the response entries by number."""
    keeper = desk(request)

    def found(type_: str, text: str) -> str:
        known_type(base.edition, type_, among=KEPT)
        one = keeper.the_one(base.edition, type_, condition(text))
        if one is None:
            said = "No resource fits a conditional reference."
            raise refusal(412, "not-found", "condition-none", said)
        return f"{type_}/{seen(request, one, 's').fhir_id}"

    rewriter = Rewriter(registry(base.edition).edition, renamed, found)
    versions: list[tuple[Step, NewVersion]] = []
    beside: dict[str, NewVersion] = {}
    told: dict[int, dict[str, Any]] = {}
    # a Provenance is of what is kept beside it, so it comes last
    for step in sorted(steps, key=lambda one: one.type == "Provenance"):
        if step.sent is None:
            continue
        if step.settled and step.before is not None:
            told[step.number] = _told(wish, base, step, Saved.before(step.before))
            continue
        with placed(step.number):
            resource = rewriter.resource(step.sent.resource)
            new = keeper.version(base.edition, resource, step.kept_as, step.before, beside)
        versions.append((step, new))
        beside[f"{step.type}/{step.kept_as}"] = new
    if versions:
        audit.about(
            request, action="U" if any(new.follows for _, new in versions) else "C",
            interaction="transaction",
            patients=[new.patient for _, new in versions],
            entities=[f"{new.type}/{new.fhir_id}" for _, new in versions],
        )  # fmt: skip
        saved = keeper.save([new for _, new in versions], [audit.kept(request)])
        for (step, _), one in zip(versions, saved, strict=True):
            told[step.number] = _told(wish, base, step, one)
    return told


def _told(wish: Wish, base: Base, step: Step, saved: Saved) -> dict[str, Any]:
    response: dict[str, Any] = {
        "status": _status(201 if saved.created else 200),
        "location": base.of(step.type, saved.kept_as, saved.version),
        "etag": etag(saved.version),
        "lastModified": dates.instant(saved.updated),
    }
    # without fullUrl: two entries of a batch may be answered with the same resource (bdl-7)
    made: dict[str, Any] = {}
    if wish.back == "representation":
        text = body.given(step.type, saved.kept_as, saved.version, saved.updated, saved.body)
        made["resource"] = msgspec.Raw(text)
    elif wish.back == "OperationOutcome":
        response["outcome"] = operation_outcome((), all_well="Kept.")
    return {**made, "response": response}


def _got(request: Request, base: Base, step: Step) -> dict[str, Any]:
    """A read or a search within a Bundle."""
    keeper = desk(request)
    if not step.fhir_id:
        query = parse(
            base.edition,
            step.type,
            condition(step.query) if step.query else [],
            strict=False,
            now=keeper.clock(),
        )
        if has_errors(query.issues):
            raise RefusalError(400, query.issues)
        reach = request.state.caller.reach(step.type, "s")
        found = run(keeper.store, query, None if reach.everything else reach.admits)
        audit.about(request, action="E", interaction="search-type",
                    patients=[kept.patient for kept in found.resources])  # fmt: skip
        return {"resource": msgspec.Raw(searchset(found, query, base)), "response": {"status": _status(200)}}
    if step.version:
        number = version_number(step.version) or 0
        kept = keeper.store.version(base.edition, step.type, step.fhir_id, number)
    else:
        kept = keeper.store.read(base.edition, step.type, step.fhir_id) if is_id(step.fhir_id) else None
    kept = seen(request, kept)
    audit.about(request, action="R", interaction="read", patients=[kept.patient],
                entities=[f"{step.type}/{step.fhir_id}"])  # fmt: skip
    text = body.given(kept.type, kept.fhir_id, kept.version, kept.updated, kept.body)
    response = {
        "status": _status(200),
        "etag": etag(kept.version),
        "lastModified": dates.instant(kept.updated),
    }
    return {"resource": msgspec.Raw(text), "response": response}


def _status(code: int) -> str:
    return f"{code} {HTTPStatus(code).phrase}"
