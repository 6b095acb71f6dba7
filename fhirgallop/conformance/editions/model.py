"""The type model: what the base specification of one edition says, cut down to what is judged.

Names: a resource or data type by its own name ("Observation", "Quantity"); a nested type by the path
of the element that defines it ("Observation.component"); the core's profiles on data types by their id
("SimpleQuantity", whose base is Quantity).
Source: FHIR ElementDefinition and StructureDefinition (R4, R4B, R5).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

Kind = Literal["resource", "complex", "nested", "primitive"]
Strength = Literal["required", "extensible", "preferred", "example"]


@dataclass(frozen=True, slots=True)
class Invariant:
    """A published constraint: FHIRPath that must not be false at each node it stands on."""

    key: str
    severity: Literal["error", "warning"]
    expression: str
    human: str


@dataclass(frozen=True, slots=True)
class Binding:
    """Which codes an element takes; `value_set` and `maximum` are canonicals without version."""

    strength: Strength
    value_set: str
    maximum: str = ""


@dataclass(frozen=True, slots=True)
class TypeRef:
    """One type an element may have.

    Attributes:
        code: FHIR type code ("Quantity", "Reference", "string", "BackboneElement").
        profiles: canonicals of profiles that the value must meet (one of them).
        targets: for Reference, CodeableReference and canonical: names of the resource types allowed
            (core types) or canonicals (profiles); empty or holding "Resource" means any.
    """

    code: str
    profiles: tuple[str, ...] = ()
    targets: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Element:
    """One element of a type.

    Attributes:
        path: its path in the definition ("Observation.value[x]").
        name: the last part ("value[x]").
        min: lower bound of occurrences.
        max: upper bound; None means any number.
        many: whether JSON writes it as an array (the base definition's maximum is above one).
        types: allowed types; empty with a content reference.
        nested: name of the nested type it defines or refers to; "" if its type stands by name.
        binding: value set and strength, or None.
        invariants: constraints which its type does not carry already.
        max_length: longest string allowed; 0 means the type's own limit.
        fixed: exact value asked, or None.
        pattern: value that must be part of it, or None.
        attribute: True where no `_x` companion exists (Element.id, Extension.url, Resource.id, xhtml).
    """

    path: str
    name: str
    min: int
    max: int | None
    many: bool
    types: tuple[TypeRef, ...]
    nested: str = ""
    binding: Binding | None = None
    invariants: tuple[Invariant, ...] = ()
    max_length: int = 0
    fixed: Any = None
    pattern: Any = None
    attribute: bool = False
    min_value: Any = None
    max_value: Any = None

    @property
    def is_choice(self) -> bool:
        """True for `value[x]`: the JSON key carries the type."""
        return self.name.endswith("[x]")

    @property
    def stem(self) -> str:
        """The name without `[x]`, as FHIRPath writes it."""
        return self.name.removesuffix("[x]")


@dataclass(frozen=True, slots=True)
class Child:
    """What stands under one JSON key of a type.

    Attributes:
        element: the element meant.
        type: the one of its types that this key says.
        type_name: name for `Edition.type`, after nested types and type profiles are resolved.
        code: FHIR type code that FHIRPath's `is` and `ofType` see.
        primitive: JSON value is a string, number or boolean, with a companion under `_key`.
        companion: the key is that companion (`_birthDate`).
    """

    element: Element
    type: TypeRef
    type_name: str
    code: str
    primitive: bool
    companion: bool = False


@dataclass(frozen=True, slots=True)
class TypeDef:
    """One type, everything inherited included.

    Attributes:
        name: see the module's text.
        kind: resource, complex, nested or primitive.
        base: name of the type it specialises; "" at the top.
        abstract: no instance may be of this very type.
        elements: by name ("value[x]" for choices), in published order.
        keys: by JSON key: choices written out, companions included.
        invariants: all constraints on a node of this type.
        pattern: regular expression of a primitive, to be matched whole, ASCII; "" if none.
        json: JSON kind of a primitive: "string", "boolean", "integer" or "decimal"; "" otherwise.
        max_length: longest text of a primitive, in characters; 0 if not limited.
    """

    name: str
    kind: Kind
    base: str
    abstract: bool
    elements: Mapping[str, Element]
    keys: Mapping[str, Child]
    invariants: tuple[Invariant, ...]
    pattern: str = ""
    json: Literal["", "string", "boolean", "integer", "decimal"] = ""
    max_length: int = 0


@dataclass(frozen=True, slots=True)
class ValueSet:
    """A value set written out: codes by system.

    Attributes:
        url: its canonical.
        systems: the codes of each system that could be enumerated.
        open_systems: systems it takes codes from which no table enumerates (languages, units, countries).
    """

    url: str
    systems: Mapping[str, frozenset[str]]
    open_systems: frozenset[str] = frozenset()

    def has(self, system: str | None, code: str) -> bool | None:
        """Whether the code is in the set; without a system (type code) any of its systems will do.

        Returns:
            None when the code could only be in a system that is not enumerated.
        """
        if system is None:
            if any(code in codes for codes in self.systems.values()):
                return True
            return None if self.open_systems else False
        if code in self.systems.get(system, ()):
            return True
        return None if system in self.open_systems else False


@dataclass(frozen=True, slots=True)
class ExtensionDef:
    """A known extension: what its value may be and where it may stand.

    Attributes:
        url: its canonical.
        types: type codes its value may have; empty for an extension made of nested ones.
        contexts: (kind, expression) pairs: kind "element", "extension" or "fhirpath".
        modifier: True when it may only stand in `modifierExtension`.
        parts: urls of the nested extensions, each with the type codes of its value.
        required: urls of nested extensions that must be there.
        binding: binding of its value, or None.
    """

    url: str
    types: tuple[str, ...]
    contexts: tuple[tuple[str, str], ...]
    modifier: bool = False
    parts: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    required: tuple[str, ...] = ()
    binding: Binding | None = None

    @classmethod
    def of(cls, url: str, row: Mapping[str, Any]) -> ExtensionDef:
        """The definition that a compact row holds (see `extensions.extension_row`)."""
        return cls(
            url=url,
            types=tuple(row.get("t", ())),
            contexts=tuple((kind, path) for kind, path in row.get("c", ())),
            modifier=bool(row.get("m")),
            parts={part: tuple(types) for part, types in row.get("p", {}).items()},
            required=tuple(row.get("r", ())),
            binding=Binding(*row["b"]) if "b" in row else None,
        )
