"""For whoever watches the service: is it up, can it do its work, and the figures."""

from __future__ import annotations

from typing import Any, Final

from fastapi import APIRouter, Depends, Request
from starlette.responses import Response

from fhirgallop.service import answers, requests
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.metrics import CONTENT_TYPE, Metrics
from fhirgallop.service.readiness import Readiness
from fhirgallop.version import VERSION

router = APIRouter(tags=["service"])

_OPEN: Final = [Depends(needs(open=True))]
_READY: Final[dict[int | str, dict[str, Any]]] = {
    200: {"description": "Every part can do its work; `warning` wants a person.",
          "content": {answers.PLAIN_JSON: {}}},
    503: {"description": "A part cannot do its work; `parts` says which and why.",
          "content": {answers.PLAIN_JSON: {}, answers.FHIR_JSON: {}}},
    **answers.REFUSALS,
}  # fmt: skip


@router.get("/health", summary="Is the service up?", responses=answers.REFUSALS, dependencies=_OPEN)
async def health() -> Response:
    """Says that the service answers, and its version."""
    return answers.json_answer({"status": "up", "version": VERSION})


@router.get("/ready", summary="Can the service do its work?", responses=_READY, dependencies=_OPEN)
def ready(request: Request) -> Response:
    """Looks at process, database, definitions, deliveries and disk, and says why a part cannot."""
    readiness: Readiness = request.app.state.readiness
    parts = readiness.parts()
    failed = any(part.state == "failed" for part in parts)
    told = {
        part.name: {"state": part.state, **({"reason": part.reason} if part.reason else {})} for part in parts
    }
    status = {"status": "not-ready" if failed else "ready", "parts": told}
    return answers.json_answer(status, status=503 if failed else 200)


@router.get(
    "/metrics",
    summary="Figures for Prometheus",
    responses={200: {"description": "Text format 0.0.4.", "content": {"text/plain": {}}}, **answers.REFUSALS},
    dependencies=[Depends(needs(roles=("operator",)))],
)
def figures(request: Request) -> Response:
    """Counts of this process; no patient's data."""
    requests.only_known(request, ())
    metrics: Metrics = request.app.state.metrics
    return Response(metrics.page(), media_type=None, headers={"Content-Type": CONTENT_TYPE})
