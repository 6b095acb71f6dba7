"""One try: a Bundle's bytes as they were kept, posted as a transaction, and what the answer means."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Final

import msgspec

from fhirgallop.delivery.answer import Verdict, judge, no_answer
from fhirgallop.delivery.auth import Access, NoTokenError
from fhirgallop.delivery.client import Client, ClientError

_FHIR: Final = "application/fhir+json"


class _Entries(msgspec.Struct):
    """As much of a Bundle as is needed to count its entries."""

    entry: list[msgspec.Raw]


_count: Final = msgspec.json.Decoder(_Entries)


class Post:
    """Sends transactions to one FHIR endpoint; may be used by several threads at once.

    Args:
        client: speaks to the endpoint, and to that of the tokens.
        base: the endpoint.
        access: where tokens come from; None where the endpoint wants none.
        new_id: for the `X-Request-Id` of each request, by which both sides' logs are held together.
    """

    def __init__(self, client: Client, base: str, access: Access | None, new_id: Callable[[], str]) -> None:
        self._client = client
        self._base = base
        self._access = access
        self._new_id = new_id

    def send(self, bundle: bytes, may_send: Callable[[], bool]) -> Verdict:
        """What one try came to.

        Args:
            bundle: a transaction Bundle.
            may_send: asked right before each request; when it says no, nothing is sent any more: somebody
                else may by now have sent this, and what comes after it.
        """
        entries = len(_count.decode(bundle).entry)
        try:
            token = self._access.token() if self._access else ""
            verdict = self._tried(bundle, entries, token, may_send)
            if self._access and verdict.kind == "401":
                # once more with a new token: this one may have been withdrawn before its time
                token = self._access.token(refused=token)
                verdict = self._tried(bundle, entries, token, may_send)
        except NoTokenError as error:
            return error.verdict
        return verdict

    def _tried(self, bundle: bytes, entries: int, token: str, may_send: Callable[[], bool]) -> Verdict:
        if not may_send():
            return Verdict("later", "late", "it took too long until it could be sent", well=False, ends=False)
        headers = {
            "Content-Type": _FHIR,
            "Accept": _FHIR,
            "Prefer": "return=minimal",
            "X-Request-Id": self._new_id(),
        }
        request = headers["X-Request-Id"]
        if token:
            headers["Authorization"] = f"Bearer {token}"
        try:
            answer = self._client.send("POST", self._base, headers=headers, body=bundle)
        except ClientError as error:
            return no_answer(error)
        return replace(judge(answer, entries), status=answer.status, request=request)
