"""What is read of a request, within limits: the body, the kinds accepted, the edition."""

from __future__ import annotations

from typing import Final, get_args

from starlette.requests import Request

from fhirgallop.intake.detect import BY_CONTENT_TYPE
from fhirgallop.observations.editions import Edition
from fhirgallop.service.answers import FHIR_JSON, PLAIN_JSON, refusal

_ANY: Final = ("*/*", "application/*")


async def body(request: Request, most: int) -> bytes:
    """The body, read no further than `most` bytes."""
    announced = request.headers.get("content-length", "")
    if announced.isdigit() and int(announced) > most:
        raise _too_large(most)
    parts: list[bytes] = []
    size = 0
    async for part in request.stream():
        size += len(part)
        if size > most:
            raise _too_large(most)
        parts.append(part)
    return b"".join(parts)


def content_type(request: Request) -> str:
    """The media type of the body: one that a reader exists for."""
    given = request.headers.get("content-type", "").partition(";")[0].strip().lower()
    if given == "text/plain":
        given = "application/hl7-v2"
    if given not in BY_CONTENT_TYPE:
        accepted = ", ".join(BY_CONTENT_TYPE)
        text = f"This Content-Type is not read here; send one of {accepted}."
        raise refusal(415, "not-supported", "http-content-type", text)
    return given


def wants_fhir(request: Request) -> bool:
    """True when the bare Bundle is asked for, False for the envelope around it."""
    wanted = [
        part.partition(";")[0].strip().lower() for part in request.headers.get("accept", "*/*").split(",")
    ]
    for one in wanted:
        if one == FHIR_JSON:
            return True
        if one == PLAIN_JSON or one in _ANY or not one:
            return False
    text = f"Nothing acceptable can be answered; ask for {PLAIN_JSON} or {FHIR_JSON}."
    raise refusal(406, "not-supported", "http-accept", text)


def edition(given: str | None, default: Edition) -> Edition:
    """The FHIR edition asked for."""
    for known in get_args(Edition):
        if (given or default) == known:
            found: Edition = known
            return found
    known_ones = ", ".join(get_args(Edition))
    raise refusal(400, "value", "http-edition", f"There is no such edition; name one of {known_ones}.")


def _too_large(most: int) -> Exception:
    text = f"The body is larger than {most:,} bytes; send fewer examinations at a time."
    return refusal(413, "too-long", "http-body-too-large", text)
