"""Forms of the desk's pages, read within limits: fields, and files as (media type, content)."""

from __future__ import annotations

from collections.abc import AsyncIterator
from typing import Final

from fastapi import Request
from starlette.datastructures import FormData, QueryParams, UploadFile
from starlette.formparsers import FormParser, MultiPartException, MultiPartParser

from fhirgallop.intake.detect import BY_CONTENT_TYPE, kind_of
from fhirgallop.service import requests
from fhirgallop.service.answers import refusal
from fhirgallop.settings import Settings

_MULTIPART: Final = "multipart/form-data"
_URLENCODED: Final = "application/x-www-form-urlencoded"
_MOST_FIELDS: Final = 1000
_MOST_FILES: Final = 8


async def form(request: Request) -> FormData:
    """The fields and files of a form.

    Raises:
        RefusalError: 400, 408, 413 or 415.
    """
    settings: Settings = request.app.state.settings
    kind = request.headers.get("content-type", "").partition(";")[0].strip().lower()
    content = await requests.body(request, settings.max_body)

    async def whole() -> AsyncIterator[bytes]:
        yield content

    try:
        if kind == _MULTIPART:
            parser = MultiPartParser(
                request.headers, whole(), max_files=_MOST_FILES, max_fields=_MOST_FIELDS,
                max_part_size=settings.max_body,
            )  # fmt: skip
            # what was sent is in memory already: nothing of it goes to a disk
            parser.spool_max_size = settings.max_body
            return await parser.parse()
        if kind == _URLENCODED:
            return await FormParser(request.headers, whole()).parse()
    except MultiPartException:
        raise refusal(400, "structure", "http-form", "The form cannot be read; send it again.") from None
    raise refusal(415, "not-supported", "http-content-type", "Send this as a form of the desk's pages.")


Sent = FormData | QueryParams


def word(sent: Sent, name: str, most: int = 400) -> str:
    """A field of one line, without blanks around it; empty where it was not sent.

    Raises:
        RefusalError: 422, it is longer than it may be.
    """
    value = sent.get(name, "")
    text = value.strip() if isinstance(value, str) else ""
    if len(text) > most:
        raise refusal(422, "too-long", "http-form", f"{name} is longer than {most} characters.")
    return text


async def files(sent: FormData, name: str) -> list[tuple[str, bytes]]:
    """The files of a form's field, by what their names end in; those without content are left out.

    Raises:
        RefusalError: 415, there is no reader for one.
    """
    found = []
    for value in sent.getlist(name):
        if not isinstance(value, UploadFile) or not value.filename:
            continue
        kind = kind_of(name=value.filename)
        if kind is None:
            text = "One file is of a kind that is not read here; JSON, NDJSON, CSV, Excel and HL7 v2 are."
            raise refusal(415, "not-supported", "http-content-type", text)
        media_type = next(media for media, one in BY_CONTENT_TYPE.items() if one == kind)
        if content := await value.read():
            found.append((media_type, content))
    return found
