"""Codes and identifiers of a resource: as a search names them, and as the database knows them.

Source: FHIR R4 search.html, "token" (`system|code`, `code`, `|code`, `system|`).
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from functools import cache
from typing import Any, Final

from fhirgallop.codes import systems
from fhirgallop.exam import catalogue
from fhirgallop.observations.identity import URI_SYSTEM
from fhirgallop.observations.provenance import CONVERSION_TAG
from fhirgallop.service.fhir.coded import URN, party_key
from fhirgallop.storage.keys import encounter_key, patient_key, token_key
from fhirgallop.storage.resource_search import Name

_ANY: Final = "\x00any"  # no system can be written so
_TAG: Final = "\x00tag "
_UUID: Final = re.compile(r"[0-9a-f]{8}-[0-9a-f]{4}-[0-9a-f]{4}-[0-9a-f]{4}-[0-9a-f]{12}", re.ASCII)


@dataclass(frozen=True, slots=True)
class Token:
    """One value of a token parameter; `system` None means any, "" none; `code` "" means any."""

    system: str | None
    code: str

    def fits(self, system: Any, code: Any) -> bool:
        """Whether a coding or identifier is meant."""
        return (self.system is None or (system or "") == self.system) and self.code in ("", code)


def has_coding(concepts: Any, token: Token) -> bool:
    """Whether a CodeableConcept, or one of several, has a coding that is meant."""
    for concept in concepts if isinstance(concepts, list) else [concepts]:
        codings = concept.get("coding") if isinstance(concept, Mapping) else None
        for coding in codings if isinstance(codings, list) else ():
            if isinstance(coding, Mapping) and token.fits(coding.get("system"), coding.get("code")):
                return True
    return False


def findings_of(token: Token) -> tuple[str, ...] | None:
    """The findings whose Observations may have a coding, "" for all that is no finding of ours.

    None where that cannot be told: a coding of a clinic's own may stand in any Observation.
    """
    if token.system not in _systems() or not token.code:
        return None
    own = (token.code,) if token.system == systems.FINDINGS else ()
    return ("", *own, *_findings().get((token.system, token.code), ()))


def identifier_name(token: Token) -> Name:
    """How the database knows a resource by an identifier; the token names a value."""
    own = identity_id(token.system or URI_SYSTEM, token.code) if token.system != "" else ""
    return Name(token_key(_ANY if token.system is None else token.system, token.code), own)


def tag_name(token: Token) -> Name:
    """The same for a tag."""
    system = _ANY if token.system is None else token.system
    own = token.code if token.system in (None, CONVERSION_TAG) and _UUID.fullmatch(token.code) else ""
    return Name(token_key(_TAG + system, token.code), own)


def identity_id(system: Any, value: Any) -> str:
    """The id that goes with an identity of ours; empty for any other identifier."""
    if system != URI_SYSTEM or not isinstance(value, str):
        return ""
    found = _UUID.fullmatch(value.removeprefix(URN))
    return found[0] if found and value.startswith(URN) else ""


def own_id(resource: Mapping[str, Any]) -> str:
    """The id that a resource must have by the identity it carries; empty where it carries none."""
    for identifier in _objects(resource.get("identifier")):
        if found := identity_id(identifier.get("system"), identifier.get("value")):
            return found
    if resource.get("resourceType") == "Provenance":
        for tag in _tags(resource):
            code = tag.get("code")
            if tag.get("system") == CONVERSION_TAG and isinstance(code, str) and _UUID.fullmatch(code):
                return code
    return ""


def tokens_of(resource: Mapping[str, Any]) -> tuple[str, ...]:
    """Every digest a resource may be asked for by, beside its id and the columns."""
    found: list[str] = []
    for prefix, held in (("", _objects(resource.get("identifier"))), (_TAG, _tags(resource))):
        for one in held:
            value = one.get("code" if prefix else "value")
            if isinstance(value, str):
                found += [token_key(prefix + system, value) for system in (str(one.get("system", "")), _ANY)]
    for name, digest in (("subject", patient_key), ("encounter", encounter_key)):
        party = resource.get(name)
        if isinstance(party, Mapping) and "identifier" in party and "reference" in party:
            found.append(party_key({"reference": party["reference"]}, digest))
    return tuple(dict.fromkeys(found))


def _objects(held: Any) -> Iterator[Mapping[str, Any]]:
    return (one for one in held if isinstance(one, Mapping)) if isinstance(held, list) else iter(())


def _tags(resource: Mapping[str, Any]) -> Iterator[Mapping[str, Any]]:
    meta = resource.get("meta")
    return _objects(meta.get("tag")) if isinstance(meta, Mapping) else iter(())


@cache
def _findings() -> Mapping[tuple[str, str], frozenset[str]]:
    """Coding -> the findings that are written with it."""
    found: dict[tuple[str, str], set[str]] = {}
    for definition in catalogue.load().findings.values():
        for coding in definition.codings:
            found.setdefault((coding.system, coding.code), set()).add(definition.id)
    return {coding: frozenset(findings) for coding, findings in found.items()}


@cache
def _systems() -> frozenset[str]:
    return frozenset({system for system, _ in _findings()})
