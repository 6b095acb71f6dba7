"""A resource in the making, filled element by element by the ids of a definition.

Source: FHIR R4 ElementDefinition (element ids: dots between names, a colon before the name of a slice), fixed
and pattern values.
"""

from __future__ import annotations

from collections.abc import Mapping
from decimal import Decimal
from typing import Any, Final

from fhirgallop.conformance.editions.model import Child
from fhirgallop.conformance.registry import Registry

_BASE: Final = "http://hl7.org/fhir/StructureDefinition/"
_TEXTS: Final = frozenset({"string", "markdown", "code", "id", "uri", "url", "canonical", "oid", "uuid"})

_OF_WORDS: Final = dict.fromkeys(("String", "Uri", "Markdown"), ("String", "CodeableConcept"))
_LONGEST: Final = 400
_DEEPEST: Final = 16

Object = dict[str, Any]


class MisfitError(Exception):
    """A value has no place in the element that it is meant for; the text has no value in it."""


class Draft:
    """A resource, or an element of it that a group of a form opened.

    Ids of elements lead to objects; those that an opened element leads to are its own.
    """

    def __init__(self, known: Registry, resource: Object, canonical: str, objects: dict[str, Object]) -> None:
        self._known = known
        self._resource = resource
        self._canonical = canonical
        self._objects = objects
        # every object that an id has led to in the whole resource
        self._made: dict[str, list[Object]] = {resource["resourceType"]: [resource]}

    @classmethod
    def of(cls, canonical: str, known: Registry) -> Draft | None:
        """An empty resource by a base type or a profile; None where that is not known."""
        url = canonical.partition("|")[0]
        profile = known.profile(url)
        type_ = str(profile["type"]) if profile else url.removeprefix(_BASE)
        if type_ not in known.edition.resources:
            return None
        resource: Object = {"resourceType": type_}
        if profile:
            resource["meta"] = {"profile": [url]}
        return cls(known, resource, url if profile else "", {type_: resource})

    def within(self, path: str) -> Draft:
        """The same resource, with a new element at `path` for what comes below it.

        Raises:
            MisfitError: there is no such element, or it holds nothing below.
        """
        if len(path) > _LONGEST or path.count(".") > _DEEPEST:
            raise MisfitError("The definition's element stands too deep; correct the item's definition.")
        parent, child, key = self._place(path)
        if child.primitive:
            raise MisfitError("A group is defined by an element that has no parts; take another definition.")
        made: Object = {}
        self._add(parent, key, child, made)
        opened = Draft(self._known, self._resource, self._canonical, {**self._objects, path: made})
        opened._made = self._made
        self._made.setdefault(path, []).append(made)
        return opened

    def put(self, path: str, kind: str, value: Any, unit: Mapping[str, Any]) -> None:
        """Puts a value where the id leads.

        Args:
            path: id of the element.
            kind: FHIR type of the value, first letter in capitals ("Coding", "Decimal").
            value: as it stands in JSON.
            unit: Coding of the unit that a number is in; empty for none.

        Raises:
            MisfitError: there is no such element, or it takes no such value.
        """
        if len(path) > _LONGEST or path.count(".") > _DEEPEST:
            raise MisfitError("The definition's element stands too deep; correct the item's definition.")
        name = path.rpartition(".")[2].partition(":")[0]
        if name.endswith("[x]"):
            parent, child, key, value = self._choice(path, kind, value, unit)
            path = f"{path.partition(':')[0]}:{key}"
        else:
            parent, child, key = self._place(path)
            value = _fitted(child.code, kind, value, unit)
        self._add(parent, key, child, value)
        if isinstance(value, dict):  # parts of it may be put, or fixed, by their own ids
            self._objects.setdefault(path, value)
            self._made.setdefault(path, []).append(value)

    def finished(self) -> Object:
        """The resource, with what its profile fixes."""
        definition = self._known.profile(self._canonical) if self._canonical else None
        view = definition.get("snapshot") or definition.get("differential") if definition else None
        elements = (view or {}).get("element", ())
        least = {str(element["id"]): element["min"] for element in elements if "min" in element}
        for element in elements:
            fixed = next((v for k, v in element.items() if k.startswith(("fixed", "pattern"))), None)
            if fixed is not None:
                self._fix(str(element["id"]), fixed, least)
        made: Object = _pruned(self._resource)
        return made

    def _fix(self, path: str, fixed: Any, least: Mapping[str, int]) -> None:
        """Fills what a profile fixes, wherever its parent is there or has to be."""
        above, _, name = path.rpartition(".")
        if above not in self._made and self._required(above, least):
            self._object(above)
        stem, _, slice_ = name.partition(":")
        if stem.endswith("[x]") or (slice_ and path not in self._made and not self._required(path, least)):
            return
        child = self._known.edition.child(self._type(above), stem)
        for parent in self._made.get(above, ()) if child else ():
            held = parent.get(stem)
            if isinstance(held, dict) and isinstance(fixed, Mapping):
                _merge(held, fixed)
            elif isinstance(held, list) and fixed not in held:
                held.append(_copy(fixed))
            elif held is None:
                parent[stem] = [_copy(fixed)] if child and child.element.many else _copy(fixed)

    def _required(self, path: str, least: Mapping[str, int]) -> bool:
        """Whether every element on the way has to be there, by the profile or else by its base."""
        names = path.split(".")
        for depth in range(1, len(names)):
            here = ".".join(names[: depth + 1])
            count = least.get(here)
            if count is None and ":" not in names[depth]:
                owner = self._known.edition.type(self._type(".".join(names[:depth])))
                element = owner.elements.get(names[depth]) if owner else None
                count = element.min if element else 0
            if not count:
                return False
        return True

    def _place(self, path: str) -> tuple[Object, Child, str]:
        """The object that holds the element of an id, made where it is missing; the element; its key."""
        above, _, name = path.rpartition(".")
        parent = self._object(above)
        key = _key(name)
        child = self._known.edition.child(self._type(above), key)
        if child is None:
            raise MisfitError("The definition has no such element; correct the item's definition.")
        return parent, child, key

    def _choice(
        self, path: str, kind: str, value: Any, unit: Mapping[str, Any]
    ) -> tuple[Object, Child, str, Any]:
        """The same for an element whose key says its type: the first type that takes the value."""
        above, _, name = path.rpartition(".")
        parent = self._object(above)
        stem = name.partition(":")[0].removesuffix("[x]")
        quantity = ("Quantity",) if kind in ("Decimal", "Integer") and unit else ()
        for wanted in (
            *quantity,
            kind,
            "Quantity",
            "DateTime",
            *_OF_WORDS.get(kind, ("CodeableConcept", "String")),
        ):
            child = self._known.edition.child(self._type(above), stem + wanted)
            if child is None:
                continue
            try:
                return parent, child, stem + wanted, _fitted(child.code, kind, value, unit)
            except MisfitError:
                continue
        raise MisfitError("The definition's element takes no value of this type; correct the item.")

    def _object(self, path: str) -> Object:
        found = self._objects.get(path)
        if found is not None:
            return found
        if "." not in path:
            raise MisfitError("The definition is of another type than its element; correct the item.")
        parent, child, key = self._place(path)
        if child.primitive:
            raise MisfitError("The definition names a part of an element that has none; correct the item.")
        made: Object = {}
        self._add(parent, key, child, made)
        self._objects[path] = made
        self._made.setdefault(path, []).append(made)
        return made

    def _type(self, path: str) -> str:
        """Name of the type that an id leads to."""
        first, *names = path.split(".")
        type_ = first
        for name in names:
            child = self._known.edition.child(type_, _key(name))
            if child is None:
                raise MisfitError("The definition has no such element; correct the item's definition.")
            type_ = child.type_name
        return type_

    def _add(self, parent: Object, key: str, child: Child, value: Any) -> None:
        if child.element.many:
            parent.setdefault(key, []).append(value)
        elif key in parent:
            raise MisfitError("An element that may stand once gets several values; correct the form.")
        else:
            parent[key] = value


def _key(name: str) -> str:
    """The key under which the element of one part of an id stands; a choice is named by its slice."""
    stem, _, slice_ = name.partition(":")
    return slice_ if stem.endswith("[x]") else stem


def _fitted(wanted: str, kind: str, value: Any, unit: Mapping[str, Any]) -> Any:
    """A value as an element of that type takes it."""
    own = kind[:1].lower() + kind[1:]
    if wanted in (kind, own):
        return value
    if kind == "Coding" and isinstance(value, Mapping):
        if wanted == "CodeableConcept":
            return {"coding": [dict(value)]}
        if wanted in ("code", "string") and isinstance(value.get("code"), str):
            return value["code"] if wanted == "code" else value.get("display", value["code"])
    if kind in ("Decimal", "Integer") and isinstance(value, int | Decimal):
        if wanted == "Quantity":
            words = {"unit": unit.get("display") or unit.get("code"), "system": unit.get("system"),
                     "code": unit.get("code")}  # fmt: skip
            return {"value": value, **{name: word for name, word in words.items() if word}}
        if wanted == "decimal" or (wanted in ("positiveInt", "unsignedInt") and kind == "Integer"):
            return value
    if own in _TEXTS and isinstance(value, str):
        if wanted in _TEXTS:
            return value
        if wanted in ("CodeableConcept", "Annotation", "Narrative"):
            return {"text": value}
    moments = ("date", "dateTime", "instant")
    if own in (*moments, "string") and wanted in moments and isinstance(value, str):
        return value
    raise MisfitError("The element takes no value of this type; correct the item's definition.")


def _merge(held: Object, fixed: Mapping[str, Any]) -> None:
    """Lays what is fixed into an element; what it holds already stays."""
    for key, value in fixed.items():
        if isinstance(value, Mapping) and isinstance(held.get(key), dict):
            _merge(held[key], value)
        elif isinstance(value, list) and isinstance(held.get(key), list):
            held[key] += [_copy(one) for one in value if one not in held[key]]
        else:
            held.setdefault(key, _copy(value))


def _pruned(held: Any) -> Any:
    """Without what is empty, and without items of a list that another one says too."""
    if isinstance(held, dict):
        made = {key: _pruned(value) for key, value in held.items()}
        return {key: value for key, value in made.items() if value not in ({}, [])}
    if isinstance(held, list):
        items = [one for one in map(_pruned, held) if one not in ({}, [])]
        return [
            one for number, one in enumerate(items) if not _said(one, items[:number] + items[number + 1 :])
        ]
    return held


def _said(one: Any, others: list[Any]) -> bool:
    if not isinstance(one, dict) or len(others) > 50:
        return False
    return any(
        isinstance(other, dict) and one != other and all(other.get(k) == v for k, v in one.items())
        for other in others
    )


def _copy(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {key: _copy(held) for key, held in value.items()}
    return [_copy(one) for one in value] if isinstance(value, list) else value
