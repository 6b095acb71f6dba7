"""What comes with this program, or is known to it: code systems, value sets, concept maps and profiles."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from functools import cache
from types import MappingProxyType
from typing import Any, Final

from fhirgallop import assets
from fhirgallop.codes import fhirjson
from fhirgallop.mapping.reading import read_map
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.observations.editions import Edition
from fhirgallop.service.fhir.map_concepts import concept_map, map_id
from fhirgallop.storage.maps import MapStore

_FOLDERS: Final = (("terminology", "codesystem"), ("terminology", "valuesets"), ("profiles", "fhirgallop"))
_OF_R5: Final = ".r5"
_OF_R4: Final = ".r4"


@dataclass(frozen=True)
class Artefact:
    """One definition.

    Attributes:
        resource: read-only.
        text: its JSON.
        tag: the same for the same text.
        current: False for a version that newer ones have replaced.
    """

    resource: Mapping[str, Any]
    text: bytes = field(repr=False)
    tag: str
    current: bool = True

    @classmethod
    def of(cls, resource: Mapping[str, Any], *, current: bool = True) -> Artefact:
        """An artefact of a resource."""
        text = fhirjson.write(resource)
        return cls(resource, text, hashlib.sha256(text).hexdigest()[:16], current)


class Library:
    """All definitions: those that are shipped, and the template maps, also in the versions of old."""

    def __init__(self, shelf: Mapping[str, TemplateMap], store: MapStore) -> None:
        self._shelf = shelf
        self._store = store
        # versions never change, so that each is made once
        self._made: dict[tuple[str, str, Edition, bool], Artefact | None] = {}

    def all(self, edition: Edition, type_: str) -> list[Artefact]:
        """Every definition of one type, the current ones first.

        Raises:
            StorageError: the database failed.
        """
        found = list(shipped(edition).get(type_, {}).values())
        if type_ == "ConceptMap":
            found += self._maps(edition)
        return sorted(found, key=lambda one: not one.current)

    def read(self, edition: Edition, type_: str, fhir_id: str) -> Artefact | None:
        """The definition of that id.

        Raises:
            StorageError: the database failed.
        """
        found = shipped(edition).get(type_, {}).get(fhir_id)
        if found is None and type_ == "ConceptMap":
            found = next((one for one in self._maps(edition) if one.resource["id"] == fhir_id), None)
        return found

    def canonical(self, edition: Edition, type_: str, canonical: str, version: str = "") -> Artefact | None:
        """The definition of that address, in the version named or the current one.

        Raises:
            StorageError: the database failed.
        """
        url, _, named = canonical.partition("|")
        version = version or named
        for one in self.all(edition, type_):
            if one.resource["url"] == url and version in ("", one.resource.get("version", "")):
                return one
        return None

    def _maps(self, edition: Edition) -> Iterator[Artefact]:
        for kept in self._store.versions():
            made = self._map(kept.name, kept.version, kept.first_used, edition)
            if made is not None:
                yield made

    def _map(self, name: str, version: str, first_used: str, edition: Edition) -> Artefact | None:
        current = self._shelf.get(name)
        on_shelf = current is not None and current.version == version
        key = (name, version, edition, on_shelf)
        if key not in self._made:
            template = current if on_shelf else self._read(name, version)
            resource = concept_map(template, edition, first_used) if template else None
            self._made[key] = Artefact.of(resource, current=on_shelf) if resource else None
        return self._made[key]

    def _read(self, name: str, version: str) -> TemplateMap | None:
        text = self._store.text(name, version)
        # a map of an older form of the language may not be readable any more; its text is still kept
        return read_map(text, name=map_id(name, version))[0] if text else None


@cache
def shipped(edition: Edition) -> Mapping[str, Mapping[str, Artefact]]:
    """Type -> id -> the definitions that are shipped for an edition."""
    found: dict[str, dict[str, Artefact]] = {}
    for parts in _FOLDERS:
        for path in sorted(assets.path(*parts).glob("*.json")):
            other = _OF_R4 if edition == "R5" else _OF_R5
            if other in path.suffixes:
                continue
            resource, issues = fhirjson.read(path.read_bytes())
            if not issues and "id" in resource:
                found.setdefault(resource["resourceType"], {})[resource["id"]] = Artefact.of(resource)
    return MappingProxyType(found)
