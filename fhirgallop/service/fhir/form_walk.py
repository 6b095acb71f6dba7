"""A form and its answers side by side: which items of a response answer which item of the form."""

from __future__ import annotations

import uuid
from collections.abc import Iterator, Mapping
from typing import Any, Final

from fhirgallop.codes import systems
from fhirgallop.observations.extract_plan import mappings, values

SDC: Final = "http://hl7.org/fhir/uv/sdc/StructureDefinition/sdc-questionnaire-"
REQUEST: Final = ("ifNoneMatch", "ifModifiedSince", "ifMatch", "ifNoneExist")

_ALLOCATE: Final = SDC + "extractAllocateId"
_NAMESPACE: Final = uuid.uuid5(uuid.NAMESPACE_URL, systems.BASE + "/extract-ids")


class Ids:
    """New ids for one response; the same response gets the same ones."""

    def __init__(self, response: Mapping[str, Any]) -> None:
        self._base = repr((response.get("id"), response.get("identifier"), response.get("authored")))

    def of(self, path: str) -> str:
        """The `urn:uuid:` of one place in the form."""
        return f"urn:uuid:{uuid.uuid5(_NAMESPACE, f'{self._base}{path}')}"

    def named(self, element: Mapping[str, Any], path: str, names: Mapping[str, str]) -> dict[str, str]:
        """The names in force, with those that an element of the form gives to new ids."""
        given = [str(name) for name in values(element, _ALLOCATE, "valueString")]
        return {**names, **{name: self.of(f"{path}%{name}") for name in given}}


def extensions(element: Mapping[str, Any], url: str) -> list[Mapping[str, Any]]:
    """The extensions of one address."""
    return [one for one in mappings(element.get("extension")) if one.get("url") == url]


def value(extension: Mapping[str, Any]) -> Any:
    """The value of an extension; None where it has none."""
    return next((held for key, held in extension.items() if key.startswith("value")), None)


def parts(extension: Mapping[str, Any]) -> dict[str, Any]:
    """The values of an extension's own extensions, by their names."""
    return {str(part.get("url")): value(part) for part in mappings(extension.get("extension"))}


def answered(within: Any, link: str) -> Iterator[dict[str, Any]]:
    """The items of a response, or of an item of it, that answer one item of the form."""
    if not isinstance(within, Mapping):
        return
    for group in [within, *mappings(within.get("answer"))]:
        for item in mappings(group.get("item")):
            if item.get("linkId") == link:
                yield dict(item)


def iterations(item: dict[str, Any]) -> Iterator[dict[str, Any]]:
    """A group once; a question once for each of its answers."""
    answers = mappings(item.get("answer"))
    if not answers:
        if mappings(item.get("item")):
            yield item
        return
    yield from ({**item, "answer": [answer]} for answer in answers)
