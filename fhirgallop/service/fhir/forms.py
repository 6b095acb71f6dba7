"""Search parameters that come in the body of a request (FHIR R4 search.html, "Introduction")."""

from __future__ import annotations

from typing import Final
from urllib.parse import parse_qsl

from fastapi import Request

from fhirgallop.service import requests
from fhirgallop.service.answers import refusal
from fhirgallop.service.fhir.described import FORM
from fhirgallop.service.fhir.query import MOST_PARAMETERS

_MOST: Final = 64 * 1024  # bytes


async def form(request: Request) -> list[tuple[str, str]]:
    """Names and values of the form; none where there is no body."""
    kind = request.headers.get("content-type", "").partition(";")[0].strip().lower()
    text = await requests.body(request, _MOST)
    if kind != FORM and (text or kind):
        said = f"This Content-Type is not read here; send {FORM}."
        raise refusal(415, "not-supported", "http-content-type", said)
    try:
        return parse_qsl(text.decode(), keep_blank_values=True, max_num_fields=MOST_PARAMETERS)
    except ValueError:
        said = f"The form cannot be read; send at most {MOST_PARAMETERS} parameters, in UTF-8."
        raise refusal(400, "structure", "search-form", said) from None
