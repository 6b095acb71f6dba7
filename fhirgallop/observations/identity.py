"""Stable identities: the same entry of the same examination is the same resource, however often it is sent.

Source: RFC 9562 section 5.5 (name-based UUIDs, version 5); FHIR R4 "conditional update".
"""

from __future__ import annotations

import hashlib
import uuid
from typing import Any, Final

from fhirgallop.codes import systems
from fhirgallop.exam.exam import Exam

URI_SYSTEM: Final = "urn:ietf:rfc:3986"
_NAMESPACE: Final = uuid.uuid5(uuid.NAMESPACE_URL, systems.BASE).bytes
_VARIANT: Final = dict(zip("0123456789abcdef", "89ab" * 4, strict=True))


class Identities:
    """The identities of all resources of one examination.

    An examination is known by its patient, its number, and the systems of both.
    """

    def __init__(self, exam: Exam) -> None:
        # repr() keeps the parts apart whatever characters they hold
        name = repr((exam.patient.system, exam.patient.value, exam.identifier_system, exam.identifier))
        self._base = hashlib.sha1(_NAMESPACE + name.encode("utf-8", "replace"), usedforsecurity=False)

    def of(self, kind: str, instance: str = "") -> str:
        """`urn:uuid:...` of one resource of the examination."""
        digest = self._base.copy()
        digest.update(f"{kind}\n{instance}".encode("utf-8", "replace"))
        h = digest.hexdigest()
        return f"urn:uuid:{h[:8]}-{h[8:12]}-5{h[13:16]}-{_VARIANT[h[16]]}{h[17:20]}-{h[20:32]}"


def identifier(urn: str) -> list[dict[str, str]]:
    """The identifier element that carries a stable identity."""
    return [{"system": URI_SYSTEM, "value": urn}]


def conditional_update(resource_type: str, urn: str) -> dict[str, str]:
    """Bundle.entry.request that creates the resource once and updates it ever after."""
    return {"method": "PUT", "url": f"{resource_type}?identifier={URI_SYSTEM}|{urn}"}


def identity_of(resource: dict[str, Any]) -> str:
    """The stable identity a resource of ours carries; empty when it is not one of ours."""
    for entry in resource.get("identifier", ()):
        if entry.get("system") == URI_SYSTEM:
            return str(entry.get("value", ""))
    return ""
