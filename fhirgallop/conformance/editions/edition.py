"""Edition: the compiled base definitions of one FHIR edition, opened type by type as they are asked for.

The compiled file is a table of plain JSON (written by `compile`); this module is its only reader.
"""

from __future__ import annotations

import gzip
import zlib
from collections.abc import Mapping
from functools import cache
from typing import Any

import orjson

from fhirgallop import assets
from fhirgallop.conformance.editions.model import (
    Binding,
    Child,
    Element,
    ExtensionDef,
    Invariant,
    TypeDef,
    TypeRef,
    ValueSet,
)
from fhirgallop.errors import AssetError

NAMES = ("R4", "R4B", "R5")
VERSIONS = {"R4": "4.0.1", "R4B": "4.3.0", "R5": "5.0.0"}
SD = "http://hl7.org/fhir/StructureDefinition/"
# R4 names the media types by the address of the RFC, R4B by that of the value set
_SAME_SETS = {"http://www.rfc-editor.org/bcp/bcp13.txt": "http://hl7.org/fhir/ValueSet/mimetypes"}


class Edition:
    """The definitions of one edition. Types, value sets and extensions are built at first use and kept.

    Attributes:
        name: "R4", "R4B" or "R5".
        fhir_version: "4.0.1", "4.3.0" or "5.0.0".
        types: the names of all types, nested ones included.
        profiles: canonical of each core profile -> its cut StructureDefinition.
    """

    def __init__(self, table: Mapping[str, Any]) -> None:
        self.name: str = table["edition"]
        self.fhir_version: str = table["fhirVersion"]
        self.profiles: Mapping[str, Mapping[str, Any]] = table["profiles"]
        self._rows: Mapping[str, Any] = table["types"]
        self._sets: Mapping[str, Any] = table["valueSets"]
        self._systems: Mapping[str, Any] = table["codeSystems"]
        self._extensions: Mapping[str, Any] = table["extensions"]
        self.types = frozenset(self._rows)
        self.resources = frozenset(
            name for name, row in self._rows.items() if row["k"] == "resource" and not row.get("a")
        )
        self._invariants = tuple(Invariant(*row) for row in table["invariants"])
        self._types: dict[str, TypeDef] = {}
        self._value_sets: dict[str, ValueSet | None] = {}
        self._ancestors: dict[str, tuple[str, ...]] = {}

    def __repr__(self) -> str:
        return f"Edition({self.name})"

    def type(self, name: str) -> TypeDef | None:
        """The type of that name, or None when this edition has none."""
        found = self._types.get(name)
        if found is None and name in self._rows:
            found = self._types[name] = self._build(name)
        return found

    def child(self, type_name: str, key: str) -> Child | None:
        """What stands under a JSON key of a type, or None when nothing may."""
        owner = self.type(type_name)
        return None if owner is None else owner.keys.get(key)

    def ancestors(self, name: str) -> tuple[str, ...]:
        """The type itself and all it specialises, nearest first; empty for an unknown name."""
        found = self._ancestors.get(name)
        if found is None:
            chain = []
            step = name
            while step in self._rows:
                chain.append(step)
                step = self._rows[step].get("b", "")
            found = self._ancestors[name] = tuple(chain)
        return found

    def is_a(self, name: str, ancestor: str) -> bool:
        """True when the type is the other one or specialises it."""
        return ancestor in self.ancestors(name)

    def value_set(self, canonical: str) -> ValueSet | None:
        """The enumerated value set, or None when it is not loaded or cannot be enumerated."""
        url = canonical.partition("|")[0]
        if url not in self._value_sets:
            row = self._sets.get(_SAME_SETS.get(url, url))
            self._value_sets[url] = None if row is None else self._expand(url, row)
        return self._value_sets[url]

    def _expand(self, url: str, row: Mapping[str, Any]) -> ValueSet:
        return ValueSet(
            url,
            {
                system: frozenset(self._systems[system] if codes is None else codes)
                for system, codes in row.get("s", {}).items()
            },
            frozenset(row.get("o", ())),
        )

    def extension(self, url: str) -> ExtensionDef | None:
        """A core extension's definition, or None when the core has none of that url."""
        row = self._extensions.get(url)
        return None if row is None else ExtensionDef.of(url, row)

    def _build(self, name: str) -> TypeDef:
        row = self._rows[name]
        base = self.type(row["b"]) if row.get("b") else None
        elements: dict[str, Element] = dict(base.elements) if base else {}
        for part in row.get("e", ()):
            element = self._element(name, part)
            elements[element.name] = element
        own = tuple(self._invariants[i] for i in row.get("i", ()))
        return TypeDef(
            name=name,
            kind=row["k"],
            base=row.get("b", ""),
            abstract=bool(row.get("a")),
            elements=elements,
            keys={key: child for e in elements.values() for key, child in self._keys(e)},
            invariants=(base.invariants if base else ()) + own,
            pattern=row.get("p", ""),
            json=row.get("j", ""),
            max_length=row.get("l", 0),
        )

    def _element(self, owner: str, part: Mapping[str, Any]) -> Element:
        maximum = part.get("x", 1)
        return Element(
            path=f"{owner}.{part['n']}",
            name=part["n"],
            min=part.get("m", 0),
            max=None if maximum < 0 else maximum,
            many=maximum < 0 or maximum > 1,
            types=tuple(
                TypeRef(t) if isinstance(t, str) else TypeRef(t[0], tuple(t[1]), tuple(t[2]))
                for t in part.get("t", ())
            ),
            nested=part.get("s", ""),
            binding=Binding(*part["b"]) if "b" in part else None,
            invariants=tuple(self._invariants[i] for i in part.get("i", ())),
            max_length=part.get("l", 0),
            attribute=bool(part.get("a")),
        )

    def _keys(self, element: Element) -> list[tuple[str, Child]]:
        keys: list[tuple[str, Child]] = []
        for ref in element.types or (TypeRef("Element"),):
            primitive = self._rows.get(ref.code, {}).get("k") == "primitive"
            named = element.nested or next(
                (p[len(SD) :] for p in ref.profiles if p.startswith(SD) and p[len(SD) :] in self._rows),
                ref.code,
            )
            key = element.stem + (ref.code[0].upper() + ref.code[1:] if element.is_choice else "")
            keys.append((key, Child(element, ref, named, ref.code, primitive)))
            if primitive and not element.attribute:
                keys.append(("_" + key, Child(element, ref, named, ref.code, primitive, companion=True)))
        return keys


@cache
def load(name: str) -> Edition:
    """The shipped definitions of an edition: "R4", "R4B" or "R5".

    Raises:
        ValueError: no such edition.
        AssetError: the compiled file is missing or broken.
    """
    if name not in NAMES:
        raise ValueError(f"{name!r} is no FHIR edition known here; use one of {', '.join(NAMES)}")
    path = assets.path("profiles", "base", f"{name}.json.gz")
    try:
        return Edition(orjson.loads(gzip.decompress(path.read_bytes())))
    except (OSError, EOFError, zlib.error, ValueError, KeyError, TypeError) as error:
        raise AssetError(f"{path.name} cannot be read ({error}); install fhirgallop again") from error
