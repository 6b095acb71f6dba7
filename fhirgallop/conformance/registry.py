"""Registry: an edition's definitions together with our own and a site's: profiles, extensions, value sets."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from functools import cache
from pathlib import Path
from typing import Any

import orjson

from fhirgallop import assets
from fhirgallop.conformance.editions import Edition, load
from fhirgallop.conformance.editions.extensions import extension_row
from fhirgallop.conformance.editions.model import ExtensionDef, ValueSet
from fhirgallop.conformance.editions.package import KINDS, Package, read_package
from fhirgallop.conformance.editions.valuesets import Expander
from fhirgallop.errors import AssetError

Definition = Mapping[str, Any]
_OWN = (("profiles", "fhirgallop"), ("terminology", "valuesets"), ("terminology", "codesystem"))


class Registry:
    """All definitions one judgement may ask for; the edition's own, then those loaded.

    Attributes:
        edition: the base definitions.
    """

    def __init__(self, edition: Edition, packages: Sequence[Package] = ()) -> None:
        self.edition = edition
        self._structures: dict[str, Definition] = {}
        value_sets: dict[str, Definition] = {}
        code_systems: dict[str, Definition] = {}
        for package in packages:
            for url, definition in package.structures.items():
                self._structures.setdefault(url, definition)
            for url, definition in package.value_sets.items():
                value_sets.setdefault(url, definition)
            for url, definition in package.code_systems.items():
                code_systems.setdefault(url, definition)
        self._loaded_sets = value_sets
        self._expander = Expander(value_sets, code_systems, edition.value_set)
        self._value_sets: dict[str, ValueSet | None] = {}
        self._extensions: dict[str, ExtensionDef | None] = {}

    def profile(self, canonical: str) -> Definition | None:
        """The profile (not the base type) of that canonical, or None when it is not known."""
        url = canonical.partition("|")[0]
        found = self._structures.get(url)
        if found is not None and found.get("derivation") != "constraint":
            found = None
        return found if found is not None else self.edition.profiles.get(url)

    def extension(self, url: str) -> ExtensionDef | None:
        """The definition of an extension, or None when it is not known."""
        if url not in self._extensions:
            self._extensions[url] = self._extension(url)
        return self._extensions[url]

    def value_set(self, canonical: str) -> ValueSet | None:
        """A value set written out, or None when it is not known."""
        url = canonical.partition("|")[0]
        if url not in self._value_sets:
            self._value_sets[url] = (
                self._expand(url) if url in self._loaded_sets else self.edition.value_set(url)
            )
        return self._value_sets[url]

    def _expand(self, url: str) -> ValueSet | None:
        codes = self._expander.expand(url)
        if codes is None or not (codes.listed or codes.unlisted):
            return None
        listed = {system: frozenset(found) for system, found in codes.listed.items()}
        return ValueSet(url, listed, frozenset(codes.unlisted))

    def _extension(self, url: str) -> ExtensionDef | None:
        definition = self._structures.get(url)
        if definition is None or definition.get("type") != "Extension":
            return self.edition.extension(url)
        return ExtensionDef.of(url, extension_row(definition))


@cache
def registry(edition: str, packages: tuple[Path, ...] = ()) -> Registry:
    """The definitions of an edition, our own, and those of the packages named (read once a process).

    Raises:
        ValueError: no such edition.
        PackageError: a package is broken; the message names the file and the reason.
    """
    return Registry(load(edition), [*(read_package(path) for path in packages), own_definitions()])


@cache
def own_definitions() -> Package:
    """Our own artefacts (profiles, value sets, code systems) as a package."""
    found: dict[str, dict[str, Definition]] = {kind: {} for kind in KINDS}
    for parts in _OWN:
        try:
            folder = assets.path(*parts)
        except AssetError:
            continue  # a part that holds no artefacts (yet) is no fault
        for file in sorted(folder.glob("*.json")):
            try:
                resource = orjson.loads(file.read_bytes())
            except ValueError as error:
                raise AssetError(f"{file.name} is not JSON; install fhirgallop again") from error
            if isinstance(resource, dict) and resource.get("resourceType") in found and "url" in resource:
                found[resource["resourceType"]][resource["url"]] = resource
    return Package("fhirgallop", "", (), *(found[kind] for kind in KINDS))
