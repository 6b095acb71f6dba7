"""Parameters of an operation, in and out.

Source: FHIR R4 Parameters, and operations.html: the parameters come in a Parameters resource (POST), or in
the address where all of them are simple (GET).
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any, Final

from fhirgallop.codes import fhirjson
from fhirgallop.service.answers import refusal
from fhirgallop.service.fhir.negotiation import GENERAL

_FLAGS: Final = {"true": True, "false": False}
_MOST: Final = 200

Given = Mapping[str, list[Any]]
Part = tuple[str, str, Any]


def of_address(pairs: Iterable[tuple[str, str]], known: Mapping[str, str]) -> dict[str, list[Any]]:
    """Parameters of an address.

    Args:
        pairs: names and values as sent.
        known: name -> FHIR type of every parameter that the operation has.
    """
    found: dict[str, list[Any]] = {}
    for name, value in pairs:
        if name in GENERAL:
            continue
        kind = _kind(name, known)
        if kind[:1].isupper():
            text = "A parameter that is no simple value cannot stand in the address; send Parameters by POST."
            raise refusal(400, "value", "operation-complex-in-address", text)
        found.setdefault(name, []).append(_simple(name, kind, value))
    return found


def of_resource(resource: Mapping[str, Any], known: Mapping[str, str]) -> dict[str, list[Any]]:
    """Parameters of a Parameters resource; a part is a mapping of its own parts."""
    if resource.get("resourceType") != "Parameters":
        raise refusal(400, "invalid", "operation-no-parameters", "The body is no Parameters resource.")
    entries = resource.get("parameter", [])
    if not isinstance(entries, list) or len(entries) > _MOST:
        raise refusal(400, "structure", "operation-parameters", f"Parameters hold a list of at most {_MOST}.")
    found: dict[str, list[Any]] = {}
    for entry in entries:
        if not isinstance(entry, dict) or not isinstance(entry.get("name"), str):
            raise refusal(400, "structure", "operation-parameters", "Each parameter has a name.")
        name = entry["name"]
        found.setdefault(name, []).append(_held(entry, name, _kind(name, known)))
    return found


def parts_of(held: Any) -> dict[str, Any]:
    """Name -> value of the parts of a parameter; the first of a name counts."""
    found: dict[str, Any] = {}
    for part in held if isinstance(held, list) else ():
        if isinstance(part, dict) and isinstance(part.get("name"), str):
            value = next((v for key, v in part.items() if key.startswith("value")), None)
            found.setdefault(part["name"], value)
    return found


def one(given: Given, *names: str) -> Any:
    """The value of a parameter that may stand once, by the first of its names that is there; else None."""
    for name in names:
        values = given.get(name)
        if values:
            if len(values) > 1:
                raise refusal(400, "value", "operation-repeated", f"{name} may be given once.")
            return values[0]
    return None


def text(given: Given, *names: str) -> str:
    """The same, for text; empty where there is none."""
    value = one(given, *names)
    return value if isinstance(value, str) else ""


def write(parts: Iterable[Part]) -> bytes:
    """A Parameters resource of (name, type, value).

    The type `part` holds further triples, the type `resource` a resource.
    """
    return fhirjson.write({"resourceType": "Parameters", "parameter": [_written(part) for part in parts]})


def _written(part: Part) -> dict[str, Any]:
    name, kind, value = part
    if kind == "part":
        return {"name": name, "part": [_written(inner) for inner in value]}
    if kind == "resource":
        return {"name": name, "resource": value}
    return {"name": name, f"value{kind[0].upper()}{kind[1:]}": value}


def _kind(name: str, known: Mapping[str, str]) -> str:
    if name not in known:
        said = f"A parameter has no meaning here; known are {', '.join(known)}."
        raise refusal(400, "not-supported", "http-unknown-parameter", said)
    return known[name]


def _held(entry: Mapping[str, Any], name: str, kind: str) -> Any:
    if kind == "Part":
        return entry.get("part")
    if kind == "Resource":
        value = entry.get("resource")
        if not isinstance(value, dict):
            raise refusal(400, "value", "operation-parameter-type", f"{name} is a resource.")
        return value
    held = [value for key, value in entry.items() if key.startswith("value")]
    if len(held) != 1:
        raise refusal(400, "value", "operation-parameter-type", f"{name} has one value.")
    if kind[:1].isupper():
        if not isinstance(held[0], dict) or not _coded(held[0]):
            raise refusal(400, "value", "operation-parameter-type", f"{name} is a {kind}.")
        return held[0]
    return _simple(name, kind, held[0])


def _coded(value: Mapping[str, Any]) -> bool:
    """Whether a Coding, or the codings of a CodeableConcept, are what they should be."""
    codings = value.get("coding", [])
    return isinstance(codings, list) and all(
        isinstance(one_, dict)
        and all(isinstance(one_.get(key, ""), str) for key in ("system", "version", "code", "display"))
        for one_ in [value, *codings]
    )


def _simple(name: str, kind: str, value: Any) -> Any:
    if kind == "boolean":
        value = _FLAGS.get(value, value) if isinstance(value, str) else value
        fits = isinstance(value, bool)
    elif kind == "integer":
        if isinstance(value, str) and value.isascii() and value.isdigit() and len(value) < 10:
            value = int(value)
        fits = isinstance(value, int) and not isinstance(value, bool) and value >= 0
    else:
        fits = isinstance(value, str) and 0 < len(value) <= 4000
    if not fits:
        raise refusal(400, "value", "operation-parameter-type", f"{name} is a value of type {kind}.")
    return value
