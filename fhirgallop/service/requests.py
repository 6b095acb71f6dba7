"""What is read of a request, within limits: the body, the kinds sent and accepted."""

from __future__ import annotations

import asyncio
import re
from collections.abc import Iterable, Sequence
from typing import Final

from starlette.requests import ClientDisconnect, Request

from fhirgallop.intake.detect import BY_CONTENT_TYPE
from fhirgallop.service.answers import refusal
from fhirgallop.settings import Settings

_ANY: Final = ("*/*", "application/*")
_PATIENCE: Final = 60.0  # seconds for a whole body
_QUALITY: Final = re.compile(r"q=(0(?:\.\d{0,3})?|1(?:\.0{0,3})?)")  # RFC 9110, 12.4.2


async def body(request: Request, most: int) -> bytes:
    """The body, read no further than `most` bytes, and no longer than a minute."""
    if request.headers.get("content-encoding", "identity").strip().lower() != "identity":
        text = "A packed body (Content-Encoding) is not read here; send it as it is."
        raise refusal(415, "not-supported", "http-content-encoding", text)
    announced = request.headers.get("content-length", "")
    if announced.isdigit() and int(announced) > most:
        raise _too_large(most)
    parts: list[bytes] = []
    size = 0
    try:
        async with asyncio.timeout(_PATIENCE):
            async for part in request.stream():
                size += len(part)
                if size > most:
                    raise _too_large(most)
                parts.append(part)
    except TimeoutError:
        text = "The body took too long to arrive; send it again, in smaller parts."
        raise refusal(408, "timeout", "http-too-slow", text) from None
    except ClientDisconnect:
        raise refusal(400, "incomplete", "http-body-cut", "The body ended before its time.") from None
    return b"".join(parts)


def only_known(request: Request, known: Iterable[str]) -> None:
    """Refuses a request with a parameter that has no meaning here: a misspelt one may not pass in silence."""
    if request.query_params.keys() - set(known):
        text = f"A parameter of this request has no meaning here; known are {', '.join(known)}."
        raise refusal(400, "not-supported", "http-unknown-parameter", text)


def content_type(request: Request) -> str:
    """The media type of the body: one that a reader exists for."""
    return known_type(request.headers.get("content-type", "").partition(";")[0].strip().lower())


def known_type(given: str) -> str:
    """A media type that a reader exists for; plain text is HL7 v2.

    Raises:
        RefusalError: 415, there is no reader for it.
    """
    if given == "text/plain":
        given = "application/hl7-v2"
    if given not in BY_CONTENT_TYPE:
        accepted = ", ".join(BY_CONTENT_TYPE)
        text = f"This Content-Type is not read here; send one of {accepted}."
        raise refusal(415, "not-supported", "http-content-type", text)
    return given


def accepted(request: Request, offered: Sequence[str]) -> str:
    """The media type to answer in: of those offered the one liked best, the first where all are.

    Raises:
        RefusalError: 406, none of them is acceptable.

    Source: RFC 9110, section 12.5.1.
    """
    wanted: list[tuple[float, str]] = []
    for part in request.headers.get("accept", "*/*").lower().split(","):
        kind, *parameters = (piece.strip() for piece in part.split(";"))
        given = [found[1] for piece in parameters if (found := _QUALITY.fullmatch(piece))]
        wanted.append((float(given[0]) if given else 1.0, kind))
    for quality, kind in sorted(wanted, key=lambda one: -one[0]):
        if quality and kind in offered:
            return kind
        if quality and (kind in _ANY or not kind):
            return offered[0]
    text = f"Nothing acceptable can be answered; ask for {' or '.join(offered)}."
    raise refusal(406, "not-supported", "http-accept", text)


def base(request: Request) -> str:
    """Address of the service as its clients know it, without a slash at its end."""
    settings: Settings = request.app.state.settings
    return (settings.address or str(request.base_url)).rstrip("/")


def prefers(request: Request, what: str) -> bool:
    """Whether a preference without a value, such as `respond-async`, was stated (RFC 7240)."""
    stated = ",".join(request.headers.getlist("prefer")).lower().replace(";", ",").split(",")
    return what in (one.strip() for one in stated)


def _too_large(most: int) -> Exception:
    text = f"The body is larger than {most:,} bytes; send fewer examinations at a time."
    return refusal(413, "too-long", "http-body-too-large", text)
