"""What programs look up before they come: how to get a token for us, and our own public keys.

Sources: SMART App Launch 2.2, "Conformance" (`.well-known/smart-configuration`); RFC 7517 (key sets).
"""

from __future__ import annotations

from typing import Any, Final

from fastapi import APIRouter, Depends, Request
from starlette.responses import Response

from fhirgallop.delivery.keys import KEPT_SECONDS
from fhirgallop.service import answers
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.fhir.address import KEPT, EditionPath
from fhirgallop.settings import Settings

router = APIRouter(tags=["service"], dependencies=[Depends(needs(open=True))])

_CATEGORY: Final = "http://terminology.hl7.org/CodeSystem/observation-category"
# Each of these works; what is not listed may, see service/auth/scopes.py.
SCOPES: Final = (
    *(f"system/{type_}.{does}" for type_ in KEPT for does in ("rs", "cu", "crus", "read")),
    *(f"system/Observation.rs?category={_CATEGORY}|{code}" for code in ("exam", "vital-signs")),
)


@router.get(
    "/fhir/{edition}/.well-known/smart-configuration",
    summary="Where to get an access token",
    responses=answers.REFUSALS,
)
async def smart_configuration(request: Request, edition: EditionPath) -> Response:  # noqa: ARG001 - the same in each
    """SMART configuration: only what works here, and only where a site has set its authorisation server."""
    settings: Settings = request.app.state.settings
    if not settings.authority:
        text = "No authorisation server is set here, so that there are no access tokens."
        raise answers.refusal(404, "not-found", "auth-no-authority", text)
    found: dict[str, Any] = {
        "token_endpoint": settings.authority_tokens,
        "token_endpoint_auth_methods_supported": ["private_key_jwt"],
        "grant_types_supported": ["client_credentials"],
        "scopes_supported": SCOPES,
        "code_challenge_methods_supported": ["S256"],
        "capabilities": ["client-confidential-asymmetric", "permission-v1", "permission-v2"],
    }
    if settings.authority_introspection:
        found["introspection_endpoint"] = settings.authority_introspection
    return answers.json_answer(found)


@router.get("/.well-known/jwks.json", summary="Our own public keys", responses=answers.REFUSALS)
async def own_keys(request: Request) -> Response:
    """The keys that we sign in with at the record system's authorisation server."""
    keys: bytes = request.app.state.public_keys
    return Response(
        keys, media_type=answers.PLAIN_JSON, headers={"Cache-Control": f"public, max-age={KEPT_SECONDS}"}
    )
