"""GET /static/...: the style sheet and scripts of the pages, read once when the service starts."""

from __future__ import annotations

import hashlib
from importlib import resources
from importlib.resources.abc import Traversable
from typing import Final

from fastapi import APIRouter, Depends, Request
from starlette.responses import Response

from fhirgallop.service import answers
from fhirgallop.service.auth.needs import needs

router = APIRouter(include_in_schema=False)

_KINDS: Final = {"css": "text/css", "js": "text/javascript", "svg": "image/svg+xml", "LICENSE": "text/plain"}


def _files(folder: Traversable, under: str = "") -> dict[str, bytes]:
    found: dict[str, bytes] = {}
    for item in folder.iterdir():
        if item.is_dir():
            found |= _files(item, f"{under}{item.name}/")
        elif item.name.rpartition(".")[2] in _KINDS:
            found[under + item.name] = item.read_bytes()
    return found


_FILES: Final = _files(resources.files("fhirgallop.service.pages").joinpath("static"))
_TAGS: Final = {name: f'"{hashlib.sha256(body).hexdigest()[:24]}"' for name, body in _FILES.items()}


@router.get("/static/{name:path}", dependencies=[Depends(needs(open=True))])
async def static(name: str, request: Request) -> Response:
    """One file, by its exact name; a browser that has it already is told so."""
    body = _FILES.get(name)
    if body is None:
        raise answers.refusal(404, "not-found", "http-404", "There is no such file.")
    headers = {"Cache-Control": "no-cache", "ETag": _TAGS[name]}
    if request.headers.get("if-none-match") == _TAGS[name]:
        return Response(status_code=304, headers=headers)
    return Response(body, media_type=_KINDS[name.rpartition(".")[2]], headers=headers)
