"""Who touched which patient's data: an AuditEvent before the answer leaves, or no answer.

An address that needs a CDS client's token or scopes touches patients' data by what it needs; so does any
other whose handler says so by `about`. The guard asks `answered` before the first byte of an answer. Where
data are written, the event is written in the same transaction (`kept`), and the guard adds none.
"""

from __future__ import annotations

import logging
from collections.abc import Callable, Iterable
from datetime import datetime
from typing import Final
from urllib.parse import quote

from sqlalchemy import Connection
from starlette.concurrency import run_in_threadpool
from starlette.requests import Request

from fhirgallop.codes import fhirjson
from fhirgallop.outcome import Issue
from fhirgallop.service.audit_event import Action, Deed, Ending, Who, audit_event
from fhirgallop.service.auth.caller import Caller
from fhirgallop.service.logging import place
from fhirgallop.storage import audit as storage
from fhirgallop.storage.audit import AuditRow, AuditTrail

log: Final = logging.getLogger("fhirgallop.audit")

_BY_METHOD: Final[dict[str, tuple[Action, str]]] = {
    "GET": ("R", "read"),
    "HEAD": ("R", "read"),
    "PUT": ("U", "update"),
    "PATCH": ("U", "patch"),
    "DELETE": ("D", "delete"),
}
_WELL: Final = Ending()
_EXECUTED: Final[tuple[Action, str]] = ("E", "operation")
_MOST: Final = 32  # characters of an opaque token that may be kept (BALP)
_LONGEST: Final = 200
_URI: Final = "!#$%&'()*+,/:;=?@[]~"  # what may stand in an address as it is


def about(
    request: Request,
    *,
    action: Action | None = None,
    interaction: str = "",
    patients: Iterable[str] = (),
    entities: Iterable[str] = (),
) -> None:
    """Says what a request does to patients' data; the guard then keeps an event of it.

    Args:
        request: the request.
        action: C create, R read, U update, D delete, E execute; else by the method.
        interaction: code of FHIR's RESTful interactions; else by the method.
        patients: digests of the patients (storage.keys.patient_key).
        entities: what else was touched: `Type/id`, `urn:uuid:...`.
    """
    acted, did = _BY_METHOD.get(request.method, _EXECUTED)
    request.state.deed = Deed(
        action or acted,
        interaction or did,
        tuple(dict.fromkeys(patient for patient in patients if patient)),
        tuple(dict.fromkeys(entities)),
        tuple(dict.fromkeys(request.query_params)) if interaction.startswith(("search", "history")) else (),
    )


def kept(
    request: Request, *, status: int = 200, issues: Iterable[Issue] = ()
) -> Callable[[Connection, int], None]:
    """What adds the event of a request to a transaction that writes data (see Submissions.add).

    Call `about` first. The guard adds no event of its own, unless the request fails in the end.

    Args:
        request: the request.
        status: how this part of it came out, where it has several parts.
        issues: why this part was refused.
    """
    auditor: Auditor = request.app.state.audit
    rows = auditor.rows(request, Ending(status, tuple(issues)))

    def keep(connection: Connection, _row: int) -> None:
        storage.add(connection, rows)
        request.state.audited = True

    return keep


class Auditor:
    """Makes AuditEvents of requests, and keeps those that no transaction of data keeps."""

    def __init__(self, trail: AuditTrail, clock: Callable[[], datetime], new_id: Callable[[], str]) -> None:
        self._trail = trail
        self._clock = clock
        self._new_id = new_id
        self.failures = 0

    def rows(self, request: Request, ending: Ending) -> list[AuditRow]:
        """The events of one request, one a patient."""
        deed = getattr(request.state, "deed", None) or Deed(*_BY_METHOD.get(request.method, _EXECUTED))
        who = _who(request)
        return self._rows(deed, who, ending, getattr(request.state, "request_id", ""))

    def kept_by_worker(
        self, deed: Deed, name: str, *, ending: Ending = _WELL, request: str = ""
    ) -> Callable[[Connection, int], None]:
        """What adds the event of a deed that no request to us is behind: a worker's, or a command's.

        Args:
            deed: what was done.
            name: who does it: the owner of a batch, the operator's account.
            ending: how it came out.
            request: X-Request-Id of a request of ours.
        """
        rows = self._rows(deed, Who(name), ending, request)
        return lambda connection, _row: storage.add(connection, rows)

    def _rows(self, deed: Deed, who: Who, ending: Ending, request: str) -> list[AuditRow]:
        at = self._clock()
        stamp = int(at.timestamp() * 1000)
        return [
            AuditRow(
                stamp,
                patient,
                fhirjson.write(
                    audit_event(
                        deed, who, ending, at=at, id_=self._new_id(), request=request, patient=patient
                    )
                ),
            )
            for patient in deed.patients or ("",)
        ]

    async def answered(self, request: Request, status: int) -> bool:
        """Keeps what has to be kept of a request before its answer leaves.

        Returns:
            False when that failed: an answer with patients' data must then not leave.
        """
        state = request.state
        if status == 401:
            wanted = True
        elif status < 400:
            wanted = _touches(request) and not getattr(state, "audited", False)
        else:
            wanted = _touches(request)
        if not wanted:
            return True
        try:
            rows = self.rows(request, Ending(status, tuple(getattr(state, "issues", ()))))
            await run_in_threadpool(self._trail.add, rows)
        except Exception as error:  # noqa: BLE001 - whatever breaks here: no answer without its event
            self.failures += 1
            said = {"error": type(error).__name__, "place": place(error)}
            log.error("an audit event could not be kept", extra=said)  # noqa: TRY400 - no traceback
            return False
        return True


def _touches(request: Request) -> bool:
    """Whether a request gets at patients' data, by what its address needs or its handler says."""
    need = getattr(request.state, "need", None)
    return hasattr(request.state, "deed") or bool(need and (need.does or need.cds))


def _who(request: Request) -> Who:
    caller: Caller | None = getattr(request.state, "caller", None)
    address = request.client.host if request.client else ""
    if caller is None:
        return Who(address=address)
    token = quote(caller.token_id[:_LONGEST], safe=_URI)
    if caller.kind == "system" and not token:
        token = _end(request.headers.get("authorization", "").partition(" ")[2])
    name = caller.name.encode("utf-8", "replace").decode()  # a token may hold half a character
    return Who(name, caller.kind in ("person", "administrator"), token, address)


def _end(token: str) -> str:
    """The end of an opaque token: at most half of it, so that a short one is not kept whole."""
    return token[len(token) - min(_MOST, len(token) // 2) :]
