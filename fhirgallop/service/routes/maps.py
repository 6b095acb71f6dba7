"""GET /maps: which template maps there are, and what each reads."""

from __future__ import annotations

from typing import Any

from fastapi import APIRouter, Depends, Request
from starlette.responses import Response

from fhirgallop.exam import catalogue
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.service import answers, requests
from fhirgallop.service.auth.needs import needs

router = APIRouter(
    tags=["template maps"], dependencies=[Depends(needs(token=True, roles=("informatician", "operator")))]
)


@router.get("/maps", summary="List the template maps", responses=answers.REFUSALS)
def list_maps(request: Request) -> Response:
    """Name, version and title of every map."""
    requests.only_known(request, ())
    shelf = request.app.state.shelf
    return answers.json_answer({"maps": [_head(template) for template in shelf.values()]})


@router.get("/maps/{name}", summary="One template map", responses=answers.REFUSALS)
def one_map(name: str, request: Request) -> Response:
    """Fields that the map reads, the findings it can give, and how many of the catalogue's these are."""
    requests.only_known(request, ())
    template = request.app.state.shelf.get(name)
    if template is None:
        raise answers.refusal(404, "not-found", "http-unknown-map", "There is no template map of that name.")
    findings = _findings(template)
    coverage = {"findings": len(findings), "of": len(catalogue.load().findings)}
    return answers.json_answer(
        {**_head(template), "coverage": coverage, "fields": sorted(template.reads()), "findings": findings}
    )


def _findings(template: TemplateMap) -> list[str]:
    named = {
        m.finding for line in template.lines if line.named for m in line.named.meanings.values() if m.finding
    }
    return sorted(named | {line.finding for line in template.lines if line.finding})


def _head(template: TemplateMap) -> dict[str, Any]:
    return {"name": template.name, "version": template.version, "title": template.title}
