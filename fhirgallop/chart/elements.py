"""Elements of FHIR resources, read without trusting their shape: a wrong shape reads as missing."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any, Final, NamedTuple

MAX_TEXT: Final = 1024
MAX_ITEMS: Final = 1000

Element = Mapping[str, Any]
NOTHING: Final[Element] = {}


class Code(NamedTuple):
    """System and code of one coding; a tuple, for thousands are made and looked up for a chart."""

    system: str
    code: str


def element(value: Any) -> Element:
    """`value` where it is an object, else an empty one."""
    return value if isinstance(value, dict) else NOTHING


def elements(value: Any) -> Iterator[Element]:
    """The objects of a list, or the one object that stands where a list should be."""
    if isinstance(value, dict):
        yield value
    elif isinstance(value, list):
        for item in value[:MAX_ITEMS]:
            if isinstance(item, dict):
                yield item


def text(value: Any) -> str:
    """A string of reasonable length, else an empty one."""
    return value.strip() if isinstance(value, str) and len(value) <= MAX_TEXT else ""


def codes(concepts: Any) -> tuple[Code, ...]:
    """Every coding of a CodeableConcept, of a list of them, or of a CodeableReference (R5)."""
    if concepts is None:
        return ()
    if type(concepts) is dict and type(concepts.get("coding")) is list and len(concepts["coding"]) == 1:
        # by far the most are one concept with one coding
        coding = element(concepts["coding"][0])
        code = text(coding.get("code"))
        return (Code(text(coding.get("system")), code),) if code else ()
    found: dict[Code, None] = {}
    for concept in elements(concepts):
        # R5 CodeableReference holds its concept one level deeper
        for coding in elements(concept.get("coding") or element(concept.get("concept")).get("coding")):
            code = text(coding.get("code"))
            if code:
                found[Code(text(coding.get("system")), code)] = None
    return tuple(found)


def code_words(concepts: Any) -> frozenset[str]:
    """The bare codes of a status concept, whatever their system."""
    return frozenset(code.code for code in codes(concepts))


def reference(value: Any) -> str:
    """The literal reference of a Reference or CodeableReference (R5); empty where there is none."""
    held = element(value)
    return text(held.get("reference")) or text(element(held.get("reference")).get("reference"))


def identifiers(value: Any) -> frozenset[tuple[str, str]]:
    """(system, value) of each Identifier."""
    return frozenset(
        (text(one.get("system")), text(one.get("value"))) for one in elements(value) if text(one.get("value"))
    )


def value_names(holder: Element, stem: str = "value") -> list[str]:
    """The names of a choice element that are there, such as `valueQuantity`."""
    return [
        name
        for name in holder
        if isinstance(name, str) and name.startswith(stem) and name[len(stem) :][:1].isupper()
    ]
