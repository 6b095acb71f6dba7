"""The Bundle of an examination as the versions of its resources, and as the text that is answered.

Each resource is written to JSON once; what is kept of it is that text with its references turned from the
Bundle's own names (`urn:uuid:...`) to addresses (`Observation/...`).
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Final

import msgspec

from fhirgallop.codes import fhirjson, systems
from fhirgallop.service.fhir.dates import Interval, of_element
from fhirgallop.storage.keys import encounter_key, patient_key
from fhirgallop.storage.resources import NewVersion

URN: Final = "urn:uuid:"
# Only a member's name stands between quotation marks and a colon: text that looks like it is escaped.
_REFERENCE: Final = re.compile(rb'"reference":"urn:uuid:([0-9a-f-]{36})"')


@dataclass(frozen=True, slots=True)
class Coded:
    """A Bundle's text, and what is to be kept of each of its resources."""

    text: bytes
    versions: tuple[NewVersion, ...]


def coded(bundle: dict[str, Any], edition: str) -> Coded:
    """What to answer and what to keep of a transaction Bundle as `observations.bundle.encode` makes it.

    The id of each resource is the UUID of its full URL, so that the same entry of the same examination is the
    same resource, whenever and by whom it is coded.
    """
    entries = bundle["entry"]
    addresses = {
        e["fullUrl"][len(URN) :].encode(): f'"reference":"{e["resource"]["resourceType"]}/'.encode()
        for e in entries
    }

    def address(found: re.Match[bytes]) -> bytes:
        start = addresses.get(found[1])
        return found[0] if start is None else start + found[1] + b'"'

    first = entries[0]["resource"]
    whose = (party_key(first.get("subject"), patient_key), party_key(first.get("encounter"), encounter_key))
    dates: dict[int, Interval | None] = {}
    raw_entries: list[dict[str, Any]] = []
    versions: list[NewVersion] = []
    for entry in entries:
        resource = entry["resource"]
        text = fhirjson.write(resource)
        raw_entries.append({**entry, "resource": msgspec.Raw(text)})
        if b'"reference":"urn:uuid:' in text:
            text = _REFERENCE.sub(address, text)
        key = id(resource.get("effectiveDateTime") or resource.get("effectivePeriod") or resource)
        if key not in dates:
            dates[key] = of_element(resource)
        start, end = dates[key] or (None, None)
        versions.append(
            NewVersion(edition, resource["resourceType"], entry["fullUrl"][len(URN) :], *whose,
                       finding_of(resource), start, end, text)
        )  # fmt: skip
    return Coded(fhirjson.write({**bundle, "entry": raw_entries}), tuple(versions))


def versions_of(bundle: bytes, edition: str) -> tuple[NewVersion, ...]:
    """What is to be kept of the resources of a Bundle that was answered before."""
    return coded(fhirjson.read(bundle)[0], edition).versions


def finding_of(resource: dict[str, Any]) -> str:
    """Id of the catalogue's finding that the resource is about; empty for none."""
    concept = resource.get("code")
    if type(concept) is dict:
        for coding in concept.get("coding", ()):
            if coding.get("system") == systems.FINDINGS:
                return str(coding.get("code", ""))[:200]
    return ""


def party_key(reference: Any, digest: Callable[[str, str], str]) -> str:
    """Digest of whom a reference means: by business identifier where it has one, else by its address.

    `Patient/7` is known by "7" alone, an address on another server by the whole of it.
    """
    if not isinstance(reference, Mapping):
        return ""
    identifier = reference.get("identifier")
    if isinstance(identifier, Mapping) and identifier.get("value"):
        return digest(str(identifier.get("system", "")), str(identifier["value"]))
    address = reference.get("reference")
    if not isinstance(address, str) or not address:
        return ""
    return digest("", address.rpartition("/")[2] if address.count("/") == 1 else address)
