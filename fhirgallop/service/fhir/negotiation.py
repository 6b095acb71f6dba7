"""What a client wants back, and how: Accept, _format, _pretty, Prefer, fhirVersion.

Source: FHIR R4 http.html, "Content Types and encodings", "General parameters", "FHIR Version Parameter",
"create/update/patch/transaction", "Handling" in search.html; RFC 7240 (Prefer).
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Final, Literal

from starlette.requests import Request

from fhirgallop.observations.editions import Edition
from fhirgallop.service.answers import FHIR_JSON, PLAIN_JSON, refusal
from fhirgallop.service.fhir.address import FHIR_VERSIONS

Back = Literal["minimal", "representation", "OperationOutcome"]

GENERAL: Final = ("_format", "_pretty")  # parameters that any request may have

_ANY: Final = ("*/*", "application/*", "")
_SHORT: Final = ("json", FHIR_JSON, PLAIN_JSON)
_QUALITY: Final = re.compile(r"q=(0(?:\.\d{0,3})?|1(?:\.0{0,3})?)", re.ASCII)  # RFC 9110, 12.4.2
_BACK: Final[dict[str, Back]] = {
    "minimal": "minimal",
    "representation": "representation",
    "operationoutcome": "OperationOutcome",
}


@dataclass(frozen=True, slots=True)
class Wish:
    """How the answer is wanted.

    Attributes:
        media_type: JSON, by FHIR's name or the general one.
        pretty: laid out for people.
        back: what a write answers with; None where nothing was said.
        strict: a search refuses parameters without meaning, instead of leaving them out.
    """

    media_type: str
    pretty: bool
    back: Back | None
    strict: bool


def wish(request: Request, edition: Edition) -> Wish:
    """Reads what is wanted; refuses what cannot be given with 406."""
    given = request.query_params.get("_format")
    if given is not None:
        # a plus sign in a query is read as a space
        kind = given.replace(" ", "+").partition(";")[0].strip().lower()
        if kind not in _SHORT:
            raise _not_acceptable()
        media_type = PLAIN_JSON if kind == PLAIN_JSON else FHIR_JSON
    else:
        media_type = _accepted(request.headers.get("accept", "*/*"), edition)
    preferred = preferences(request.headers.getlist("prefer"))
    return Wish(
        media_type,
        request.query_params.get("_pretty", "false") == "true",
        _BACK.get(preferred.get("return", "").lower()),
        preferred.get("handling", "lenient").lower() == "strict",
    )


def preferences(headers: list[str]) -> dict[str, str]:
    """Preferences by name; the first of a name counts (RFC 7240, section 2)."""
    found: dict[str, str] = {}
    for part in ",".join(headers).split(","):
        name, _, value = part.partition(";")[0].partition("=")
        found.setdefault(name.strip().lower(), value.strip().strip('"'))
    return found


def sent_fhir(request: Request, edition: Edition) -> None:
    """Refuses a body that is not JSON, or not of this edition, by its own word."""
    kind, *parameters = request.headers.get("content-type", "").lower().split(";")
    if kind.strip() not in (FHIR_JSON, PLAIN_JSON) or not _same_edition(parameters, edition):
        text = f"This Content-Type is not read here; send {FHIR_JSON} of FHIR {FHIR_VERSIONS[edition]}."
        raise refusal(415, "not-supported", "http-content-type", text)


def _accepted(header: str, edition: Edition) -> str:
    ranked: list[tuple[float, str]] = []
    for part in header.lower().split(","):
        kind, *parameters = (piece.strip() for piece in part.split(";"))
        quality = next((float(q[1]) for piece in parameters if (q := _QUALITY.fullmatch(piece))), 1.0)
        if quality and _same_edition(parameters, edition):
            ranked.append((quality, kind))
    for _, kind in sorted(ranked, key=lambda one: -one[0]):
        if kind in (FHIR_JSON, PLAIN_JSON):
            return kind
        if kind in _ANY:
            return FHIR_JSON
    raise _not_acceptable()


def _same_edition(parameters: list[str], edition: Edition) -> bool:
    """Whether a fhirVersion parameter, where there is one, names this edition."""
    for piece in parameters:
        name, _, value = piece.strip().partition("=")
        if name == "fhirversion" and value.strip('" ') != FHIR_VERSIONS[edition]:
            return False
    return True


def _not_acceptable() -> Exception:
    text = f"Nothing acceptable can be answered; ask for {FHIR_JSON}, of this address's FHIR version."
    return refusal(406, "not-supported", "http-accept", text)
