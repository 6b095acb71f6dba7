"""Forms of the desk's pages, read within limits: fields, and files as (media type, content)."""

from __future__ import annotations

from collections.abc import AsyncGenerator, Iterable
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


class Form(dict[str, str]):
    """The fields of a form by name, and its files as (name of the field, name of the file, content)."""

    def __init__(self, fields: Iterable[tuple[str, str]], uploads: Iterable[tuple[str, str, bytes]]) -> None:
        super().__init__(fields)
        self.uploads = tuple(uploads)


async def form(request: Request) -> Form:
    """The fields and files of a form.

    Raises:
        RefusalError: 400, 408, 413 or 415.
    """
    settings: Settings = request.app.state.settings
    kind = request.headers.get("content-type", "").partition(";")[0].strip().lower()
    content = await requests.body(request, settings.max_body)

    async def whole() -> AsyncGenerator[bytes, None]:
        yield content

    try:
        if kind == _MULTIPART:
            parser = MultiPartParser(
                request.headers, whole(), max_files=_MOST_FILES, max_fields=_MOST_FIELDS,
                max_part_size=settings.max_body,
            )  # fmt: skip
            # what was sent is in memory already: nothing of it goes to a disk
            parser.spool_max_size = settings.max_body
            return await _read_out(await parser.parse())
        if kind == _URLENCODED:
            return await _read_out(await FormParser(request.headers, whole()).parse())
    except MultiPartException:
        raise refusal(400, "structure", "http-form", "The form cannot be read; send it again.") from None
    raise refusal(415, "not-supported", "http-content-type", "Send this as a form of the desk's pages.")


async def _read_out(parsed: FormData) -> Form:
    fields, uploads = [], []
    try:
        for name, value in parsed.multi_items():
            if isinstance(value, UploadFile):
                uploads.append((name, value.filename or "", await value.read()))
            else:
                fields.append((name, value))
    finally:
        await parsed.close()
    return Form(fields, uploads)


Sent = Form | QueryParams


def word(sent: Sent, name: str, most: int = 400) -> str:
    """A field of one line, without blanks around it; empty where it was not sent.

    Raises:
        RefusalError: 422, it is longer than it may be.
    """
    text = (sent.get(name) or "").strip()
    if len(text) > most:
        raise refusal(422, "too-long", "http-form", f"{name} is longer than {most} characters.")
    return text


def files(sent: Form, name: str) -> list[tuple[str, bytes]]:
    """The files of a form's field, by what their names end in; those without content are left out.

    Raises:
        RefusalError: 415, there is no reader for one.
    """
    found = []
    for field, file, content in sent.uploads:
        if field != name or not file or not content:
            continue
        kind = kind_of(name=file)
        if kind is None:
            text = "One file is of a kind that is not read here; JSON, NDJSON, CSV, Excel and HL7 v2 are."
            raise refusal(415, "not-supported", "http-content-type", text)
        found.append((next(media for media, one in BY_CONTENT_TYPE.items() if one == kind), content))
    return found
