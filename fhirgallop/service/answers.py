"""Answers as bytes: FHIR JSON, and an OperationOutcome for everything that went wrong."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any, Final

from starlette.responses import Response

from fhirgallop.codes import fhirjson
from fhirgallop.outcome import Issue, operation_outcome

FHIR_JSON: Final = "application/fhir+json"
PLAIN_JSON: Final = "application/json"

# What every answer says to a browser: nothing here is to be kept, framed, sniffed or told to others.
SAFE_HEADERS: Final = {
    "Cache-Control": "no-store",
    "X-Content-Type-Options": "nosniff",
    "Referrer-Policy": "no-referrer",
    "Content-Security-Policy": "default-src 'none'; style-src 'self'; frame-ancestors 'none'; "
    "base-uri 'none'; form-action 'self'",
}


def told(meaning: str) -> dict[str, Any]:
    """How the OpenAPI description says that a status comes with an OperationOutcome."""
    return {"description": f"{meaning} An OperationOutcome says what and where.", "content": {FHIR_JSON: {}}}


REFUSALS: Final[dict[int | str, dict[str, Any]]] = {
    "4XX": told("The request cannot be served."),
    "5XX": told("The service failed."),
}


class RefusalError(Exception):
    """A request that cannot be served: an HTTP status and the issues that say why."""

    def __init__(
        self, status: int, issues: Iterable[Issue], headers: Mapping[str, str] | None = None
    ) -> None:
        self.status = status
        self.issues = tuple(issues)
        self.headers = dict(headers or {})
        super().__init__(f"HTTP {status}")


def refusal(status: int, code: str, rule: str, text: str) -> RefusalError:
    """A refusal for one reason."""
    return RefusalError(status, [Issue("error", code, rule, text)])


def json_answer(value: Any, *, status: int = 200, fhir: bool = False) -> Response:
    """`value` as JSON bytes."""
    return Response(fhirjson.write(value), status, media_type=FHIR_JSON if fhir else PLAIN_JSON)


def outcome_answer(
    status: int, issues: Iterable[Issue], headers: Mapping[str, str] | None = None
) -> Response:
    """An OperationOutcome with an HTTP status."""
    body = fhirjson.write(operation_outcome(issues))
    return Response(body, status, headers=dict(headers or {}), media_type=FHIR_JSON)
