"""/knowledge as pages: every rule with its reasons, and how each fares."""

from __future__ import annotations

from typing import Final

from fastapi import APIRouter, Depends, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import Response

from fhirgallop.reasoning.rulebook import Rulebook
from fhirgallop.service import answers
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.desk.forms import word
from fhirgallop.service.pages.rendering import page
from fhirgallop.service.rule_tally import RuleTally
from fhirgallop.service.views import knowledge
from fhirgallop.service.views.knowledge import TIERS, Fares, fares, last_months, rule_text
from fhirgallop.service.views.months import months
from fhirgallop.storage.rule_counts import RuleCounts

router = APIRouter(
    prefix="/knowledge",
    include_in_schema=False,
    dependencies=[Depends(needs(roles=("clinician", "informatician", "operator")))],
)

_MOST_TYPED: Final = 200
_AT_ONCE: Final = 50


@router.get("")
async def list_rules(request: Request) -> Response:
    """All rules, or those in which some words stand."""
    query, tier = (word(request.query_params, name, _MOST_TYPED) for name in ("words", "shown"))
    typed = request.query_params.get("from", "0")
    start = int(typed) if typed.isascii() and typed.isdecimal() and len(typed) < 7 else 0
    return await run_in_threadpool(_rules, request, query, tier, start)


@router.get("/{rule}")
async def one_rule(request: Request, rule: str) -> Response:
    """One rule: what it says, why, from where, and how it fares."""
    return await run_in_threadpool(_rule, request, rule)


def _rules(request: Request, query: str, tier: str, start: int) -> Response:
    book: Rulebook = request.app.state.hooks.rules
    found = list(knowledge.found(book, query, tier if tier in TIERS.values() else ""))
    fared = _fares(request)
    every = fared.all()
    return page(
        request,
        "knowledge.html",
        found=found[start : start + _AT_ONCE],
        number=len(found),
        start=start,
        following=start + _AT_ONCE if len(found) > start + _AT_ONCE else 0,
        query=query,
        tier=tier,
        tiers=tuple(TIERS.values()),
        total=len(book.rules),
        rules_version=book.version,
        fared={one.id: fared.total(one.id) for one in found[start : start + _AT_ONCE]},
        every=every,
        drawn=months(every, "All rules by month"),
    )


def _rule(request: Request, id_: str) -> Response:
    book: Rulebook = request.app.state.hooks.rules
    rule = book.rules.get(id_)
    if rule is None:
        text = "There is no rule of that name. Look it up in the list of rules."
        raise answers.refusal(404, "not-found", "http-unknown-rule", text)
    fared = _fares(request)
    by_month = fared.of(id_)
    return page(
        request,
        "knowledge_rule.html",
        rule=rule_text(rule, book),
        by_month=by_month,
        total=fared.total(id_),
        drawn=months(by_month, f"The rule {id_} by month"),
        rules_version=book.version,
    )


def _fares(request: Request) -> Fares:
    tally: RuleTally = request.app.state.rule_tally
    counts: RuleCounts = request.app.state.rule_counts
    tally.write()
    span = last_months(request.app.state.clock())
    return fares(span, counts.raised(span[0]), counts.answers(span[0]))
