"""A request with a key of the sender's: sent again it does nothing, and gets the very same answer.

Source: draft-ietf-httpapi-idempotency-key-header (the header is a string of RFC 9651 in quotation marks; bare
ones are taken too). What the draft leaves open: only answers of success are kept, so that a request that was
refused may be mended and sent again under the same key; how long, is a setting.
"""

from __future__ import annotations

import hashlib
import re
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import datetime
from typing import Final

from sqlalchemy import Connection
from sqlalchemy.exc import IntegrityError
from starlette.requests import Request
from starlette.responses import Response

from fhirgallop.codes import fhirjson
from fhirgallop.service.answers import refusal
from fhirgallop.service.auth.caller import NOBODY, Caller
from fhirgallop.storage import idempotency
from fhirgallop.storage.idempotency import RESERVED, Answers, KeptAnswer

_KEY: Final = re.compile(r'"([\x20-\x21\x23-\x5b\x5d-\x7e]{8,200})"|([\x21\x23-\x5b\x5d-\x7e]{8,200})')
# What of a request makes its answer, beside address and content.
_HEADERS: Final = ("accept", "prefer")


class KeyTakenError(Exception):
    """Another request with this key was first; nothing of this one was kept."""


@dataclass(frozen=True, slots=True)
class Reply:
    """An answer of success before it leaves; `repeated` where it was given before."""

    body: bytes
    media_type: str
    headers: dict[str, str] = field(default_factory=dict)
    status: int = 200
    patient: str = ""
    repeated: bool = False

    def response(self) -> Response:
        """As it leaves."""
        return Response(self.body, self.status, headers=self.headers, media_type=self.media_type)


@dataclass(frozen=True, slots=True)
class Keyed:
    """A caller's key and the request it came with, both as digests."""

    key: str
    request: str


def keyed(request: Request, kind: str, *contents: bytes) -> Keyed | None:
    """What a request says; None where it has no key.

    Args:
        request: the request.
        kind: media type of its content.
        contents: the body, or each part of it: what stands between parts may change when it is sent again.

    Raises:
        RefusalError: the key is malformed, or there are several.
    """
    given = request.headers.getlist("idempotency-key")
    if not given:
        return None
    found = _KEY.fullmatch(given[0].strip())
    if len(given) > 1 or found is None:
        text = "Idempotency-Key takes one string of 8 to 200 printable ASCII characters, in quotation marks."
        raise refusal(400, "value", "http-idempotency-key", text)
    caller: Caller = getattr(request.state, "caller", NOBODY)
    whose = repr((caller.kind, caller.name, found[1] or found[2]))
    about = [request.method, request.url.path, request.url.query, kind]
    about += [request.headers.get(name, "") for name in _HEADERS]
    about += [hashlib.sha256(content).hexdigest() for content in contents]
    whole = hashlib.sha256(repr(about).encode("utf-8", "replace"))
    return Keyed(hashlib.sha256(whose.encode()).hexdigest(), whole.hexdigest())


class KeyDesk:
    """Keeps answers by key, and gives them out again."""

    def __init__(self, store: Answers, clock: Callable[[], datetime], hours: int) -> None:
        self._store = store
        self._clock = clock
        self._kept_ms = hours * 3_600_000

    def again(self, asked: Keyed) -> Reply | None:
        """The answer that this request got before; None where it got none.

        Raises:
            RefusalError: 422, the key came with another request before.
            StorageError: the database failed.
        """
        known = self._store.find(asked.key, since=self._now() - self._kept_ms)
        if known is None:
            return None
        if known.request != asked.request:
            text = "This Idempotency-Key came with another request before; give each request its own."
            raise refusal(422, "business-rule", "http-idempotency-key-reused", text)
        if known.status == RESERVED:
            return None
        headers = {**fhirjson.read(known.headers)[0], "Fhirgallop-Repeated": "true"}
        return Reply(known.answer, known.media_type, headers, known.status, known.patient, repeated=True)

    def keep(self, asked: Keyed, reply: Reply) -> Callable[[Connection], None]:
        """What keeps an answer, to be called in the transaction of what it tells of.

        Raises, when called:
            KeyTakenError: another request with this key was first.
        """
        kept = self._kept(asked, reply)

        def add(connection: Connection) -> None:
            try:
                idempotency.add(connection, kept)
            except IntegrityError:
                raise KeyTakenError from None

        return add

    def reserve(self, asked: Keyed) -> Reply | None:
        """Takes the key for a request of many transactions; whoever sends it again meanwhile joins in.

        Returns:
            The answer, where another request with the key was quicker and has one.

        Raises:
            RefusalError: 422, the key came with another request.
            StorageError: the database failed.
        """
        if self._store.reserve(KeptAnswer(asked.key, asked.request, self._now())):
            return None
        return self.again(asked)

    def finish(self, asked: Keyed, reply: Reply) -> None:
        """Keeps the answer of a request whose key was reserved, unless another one was quicker.

        Raises:
            StorageError: the database failed.
        """
        self._store.finish(self._kept(asked, reply))

    def release(self, asked: Keyed) -> None:
        """Gives a reserved key back, where the request left nothing behind.

        Raises:
            StorageError: the database failed.
        """
        self._store.release(asked.key, asked.request)

    def _kept(self, asked: Keyed, reply: Reply) -> KeptAnswer:
        headers = fhirjson.write(reply.headers)
        return KeptAnswer(
            asked.key, asked.request, self._now(), reply.status, reply.media_type, headers, reply.body,
            reply.patient,
        )  # fmt: skip

    def _now(self) -> int:
        return int(self._clock().timestamp() * 1000)
