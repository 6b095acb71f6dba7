"""What the service says of itself: a readable page of its addresses."""

from __future__ import annotations

from html import escape
from importlib import resources
from typing import Any, Final

from fastapi import APIRouter, Depends, Request
from starlette.responses import HTMLResponse, Response

from fhirgallop.service.auth.needs import needs

router = APIRouter(tags=["service"], dependencies=[Depends(needs(open=True))])

_STYLE: Final = resources.files("fhirgallop.service.pages").joinpath("style.css").read_text(encoding="utf-8")
_EXAMPLE: Final = "curl -H 'Content-Type: application/json' --data-binary @exam.json '{base}exams?map=NAME'"


@router.get("/style.css", include_in_schema=False)
def style() -> Response:
    """The page's only style sheet."""
    return Response(_STYLE, media_type="text/css")


@router.get("/docs", include_in_schema=False)
def page(request: Request) -> HTMLResponse:
    """The OpenAPI description as a page; it asks no other host for anything."""
    described: dict[str, Any] = request.app.openapi()
    parts = [
        _operation(path, method, operation)
        for path, methods in described["paths"].items()
        for method, operation in methods.items()
    ]
    title = escape(described["info"]["title"])
    return HTMLResponse(
        f'<!doctype html><html lang="en"><head><meta charset="utf-8"><title>{title}</title>'
        '<meta name="viewport" content="width=device-width"><link rel="stylesheet" href="/style.css"></head>'
        f"<body><main><h1>{title}</h1><p>{escape(described['info']['description'])}</p>"
        '<p>The same as data: <a href="/openapi.json">openapi.json</a>. For example:</p>'
        f"<pre><code>{escape(_EXAMPLE.format(base=request.base_url))}</code></pre>"
        f"{''.join(parts)}</main></body></html>"
    )


def _worded(text: str) -> str:
    """Text as HTML; what stands between backticks is code."""
    parts = escape(text).split("`")
    return "".join(f"<code>{part}</code>" if at % 2 else part for at, part in enumerate(parts))


def _operation(path: str, method: str, operation: dict[str, Any]) -> str:
    rows = [
        (parameter["name"], parameter.get("description", ""), "needed" if parameter.get("required") else "")
        for parameter in operation.get("parameters", ())
    ]
    kinds = list(operation.get("requestBody", {}).get("content", {}))
    cells = "".join(
        f"<tr><th scope='row'><code>{escape(name)}</code></th><td>{escape(text)}</td><td>{needed}</td></tr>"
        for name, text, needed in rows
    )
    answered = "".join(
        f"<tr><th scope='row'><code>{escape(status)}</code></th><td>{escape(answer['description'])}</td></tr>"
        for status, answer in operation["responses"].items()
    )
    address = f"<code>{method.upper()} {escape(path)}</code>"
    return (
        f"<section><h2>{address} {escape(operation.get('summary', ''))}</h2>"
        f"<p>{_worded(operation.get('description', ''))}</p>"
        + (f"<table>{cells}</table>" if cells else "")
        + (f"<p>Bodies: {', '.join(f'<code>{escape(kind)}</code>' for kind in kinds)}</p>" if kinds else "")
        + f"<table>{answered}</table></section>"
    )
