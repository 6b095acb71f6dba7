"""References between the resources of a Bundle, turned to the addresses these are kept under.

Source: FHIR R4 http.html, "transaction": every element of type uri, url, oid, uuid or Reference, and the
links of narratives, but never a canonical; "Conditional References" (`Type?parameters`).
"""

from __future__ import annotations

import re
from collections.abc import Callable
from typing import Any, Final

from fhirgallop.conformance.editions import Edition as Definitions

_CARRIERS: Final = frozenset({"uri", "url", "oid", "uuid"})
_LINK: Final = re.compile(r"(?<=[\"'])urn:(?:uuid|oid):[0-9A-Za-z.\-]{1,64}(?=[\"'])", re.ASCII)
_CONDITIONAL: Final = re.compile(r"([A-Z][A-Za-z]{1,63})\?(.{1,2000})", re.ASCII)

Renaming = Callable[[str], str | None]
Finding = Callable[[str, str], str]


class Rewriter:
    """Rewrites one resource after another."""

    def __init__(self, definitions: Definitions, renamed: Renaming, found: Finding) -> None:
        """Takes what decides.

        Args:
            definitions: of the edition; they say what is an address.
            renamed: the new address for a name of the Bundle, None where it is none.
            found: the address for a conditional reference, by type and condition; raises where there is none.
        """
        self._definitions = definitions
        self._renamed = renamed
        self._found = found

    def resource(self, resource: dict[str, Any]) -> dict[str, Any]:
        """The resource with its references turned; what is given is left as it was."""
        made: dict[str, Any] = self._object(resource, str(resource.get("resourceType")))
        return made

    def _object(self, held: dict[str, Any], type_: str) -> dict[str, Any]:
        return {key: self._value(value, type_, key) for key, value in held.items()}

    def _value(self, held: Any, type_: str, key: str) -> Any:
        child = self._definitions.child(type_, key)
        if child is None or child.companion:
            return held
        if isinstance(held, list):
            return [self._item(one, child.type_name, child.code, type_, key) for one in held]
        return self._item(held, child.type_name, child.code, type_, key)

    def _item(self, held: Any, type_: str, code: str, owner: str, key: str) -> Any:
        if isinstance(held, dict):
            return self._object(held, str(held["resourceType"]) if "resourceType" in held else type_)
        if not isinstance(held, str):
            return held
        if code == "xhtml":
            return _LINK.sub(lambda link: self._renamed(link[0]) or link[0], held)
        if owner == "Reference" and key == "reference":
            conditional = _CONDITIONAL.fullmatch(held)
            if conditional:
                return self._found(conditional[1], conditional[2])
        elif code not in _CARRIERS:
            return held
        return self._renamed(held) or held
