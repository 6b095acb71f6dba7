"""What an edition's address can do, said from the same tables that the routes are made of.

Source: FHIR R4 and R5 CapabilityStatement and TerminologyCapabilities, http.html "capabilities".
"""

from __future__ import annotations

import hashlib
from functools import lru_cache
from typing import Any, Final

from fhirgallop.codes import fhirjson, systems
from fhirgallop.conformance.registry import registry
from fhirgallop.service.answers import FHIR_JSON, refusal
from fhirgallop.service.fhir import definitions
from fhirgallop.service.fhir.address import KEPT, PUBLISHED, Base
from fhirgallop.service.fhir.bundles import MOST_ENTRIES
from fhirgallop.service.fhir.known_codes import system
from fhirgallop.service.fhir.operations import OPERATIONS
from fhirgallop.service.fhir.query import MOST_COUNT, OFFERED
from fhirgallop.service.fhir.terminology import EXPAND
from fhirgallop.version import VERSION

_DATE: Final = "2026-12-01"
_MODES: Final = ("full", "normative", "terminology")
_SERVICE: Final = "http://terminology.hl7.org/CodeSystem/restful-security-service"
_VALIDATE: Final = "http://hl7.org/fhir/OperationDefinition/Resource-validate"
EXTRACT: Final = "http://hl7.org/fhir/uv/sdc/OperationDefinition/QuestionnaireResponse-extract"

_INTERACTIONS: Final = ("read", "vread", "update", "history-instance", "create", "search-type")
_ABOUT_REST: Final = (
    "What was coded in this edition is found here. HEAD, delete, patch, _summary, _elements and includes are "
    f"not offered. A page holds at most {MOST_COUNT} resources, a Bundle at most {MOST_ENTRIES} entries. "
    "Parameters of a search that have no meaning here are left out and named in the answer, or refused where "
    "Prefer: handling=strict is sent. A version that is not the current one is refused with 412."
)
_BY_ADDRESS: Final = (
    "By the reference as it stands in the resource. Most resources know their {0} by identifier alone: ask "
    "with the modifier identifier, {0}:identifier=system|value. An id is never taken for an identifier of "
    "some other system."
)
_OURS: Final = (systems.FINDINGS, systems.QUALIFIERS, systems.SNOMED, systems.LOINC, systems.HPO)


def statement(base: Base, mode: str, *, closed: bool) -> bytes:
    """The statement of an edition's address.

    Args:
        base: edition and address.
        mode: full, normative (the same here) or terminology.
        closed: whether callers have to present a token.

    Raises:
        RefusalError: 400 for another mode.
    """
    if mode not in _MODES:
        raise refusal(400, "value", "http-parameter", f"mode is one of {', '.join(_MODES)}.")
    return _statement(base, mode == "terminology", closed)


def tag(text: bytes) -> str:
    """The same for the same statement."""
    return hashlib.sha256(text).hexdigest()[:16]


@lru_cache(maxsize=32)
def _statement(base: Base, of_terminology: bool, closed: bool) -> bytes:
    return fhirjson.write(_terminology(base) if of_terminology else _full(base, closed))


def _full(base: Base, closed: bool) -> dict[str, Any]:
    rest: dict[str, Any] = {
        "mode": "server",
        "documentation": _ABOUT_REST,
        "security": _security(closed),
        "resource": [*map(_kept, KEPT), *map(_published, PUBLISHED), _forms()],
        "interaction": [{"code": "transaction"}, {"code": "batch"}],
        "operation": [_validate()],
    }
    return {
        **_head("CapabilityStatement", base),
        "fhirVersion": registry(base.edition).edition.fhir_version,
        "format": ["json", FHIR_JSON],
        "rest": [rest],
    }


def _head(type_: str, base: Base) -> dict[str, Any]:
    return {
        "resourceType": type_,
        "url": f"{base.url}/metadata{'?mode=terminology' if type_ != 'CapabilityStatement' else ''}",
        "version": VERSION,
        "name": "Fhirgallop" + ("Terminology" if type_ != "CapabilityStatement" else ""),
        "title": "fhirgallop",
        "status": "active",
        "date": _DATE,
        "description": "Coded findings of heart examinations, and the terminology they are coded with.",
        "kind": "instance",
        "software": {"name": "fhirgallop", "version": VERSION},
        "implementation": {"description": "fhirgallop", "url": base.url},
    }


def _security(closed: bool) -> dict[str, Any]:
    if not closed:
        return {"description": "Authorisation is off: only programs of this machine are let in."}
    coding = {"system": _SERVICE, "code": "SMART-on-FHIR"}
    return {
        "service": [{"coding": [coding], "text": "SMART backend services"}],
        "description": "Access tokens with system scopes; see .well-known/smart-configuration.",
    }


def _kept(type_: str) -> dict[str, Any]:
    return {
        "type": type_,
        "interaction": [{"code": code} for code in _INTERACTIONS],
        "versioning": "versioned",
        "readHistory": True,
        "updateCreate": False,
        "conditionalCreate": True,
        "conditionalRead": "full-support",
        "conditionalUpdate": True,
        "conditionalDelete": "not-supported",
        "referencePolicy": ["logical", "literal"],
        "searchParam": [_parameter(name, kind) for name, kind in OFFERED[type_].items()],
        "operation": [_validate()],
    }


def _parameter(name: str, kind: str) -> dict[str, Any]:
    found = {"name": name, "type": kind}
    if kind == "reference":
        found["documentation"] = _BY_ADDRESS.format(name)
    return found


def _published(type_: str) -> dict[str, Any]:
    found: dict[str, Any] = {
        "type": type_,
        "interaction": [{"code": "read"}, {"code": "search-type"}],
        "versioning": "no-version",
        "conditionalRead": "not-match",
        "searchParam": [{"name": name, "type": kind} for name, kind in definitions.OFFERED.items()],
    }
    offered = [{"name": one.name, "definition": one.definition} for one in OPERATIONS if one.type == type_]
    return {**found, "operation": [*offered, _validate()]}


def _forms() -> dict[str, Any]:
    operation = {"name": "extract", "definition": EXTRACT}
    return {"type": "QuestionnaireResponse", "operation": [operation, _validate()]}


def _validate() -> dict[str, Any]:
    return {"name": "validate", "definition": _VALIDATE}


def _terminology(base: Base) -> dict[str, Any]:
    found = _head("TerminologyCapabilities", base)
    found["codeSystem"] = [_code_system(base, url) for url in _OURS]
    found["expansion"] = {
        "hierarchical": False,
        "paging": True,
        "parameter": [{"name": name} for name in EXPAND],
    }
    found["validateCode"] = {"translations": False}
    found["translation"] = {"needsMap": False}
    return found


def _code_system(base: Base, url: str) -> dict[str, Any]:
    known = system(base.edition, url)
    made: dict[str, Any] = {"uri": url}
    if known and known.version:
        made["version"] = [{"code": known.version, "isDefault": True}]
    if base.edition == "R5":
        made["content"] = "complete" if known and known.complete else "fragment"
    return {**made, "subsumption": False}
