"""Rows of known extensions: type of value, context, nested parts.

Source: FHIR StructureDefinition.context, and the snapshot of a StructureDefinition on Extension.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from fhirgallop.conformance.editions.structures import binding_row

Definition = Mapping[str, Any]

_SD = "http://hl7.org/fhir/StructureDefinition/"
# Places where the published definitions themselves (and the published examples) use these core extensions
# against the context they declare: the use is normative text of ElementDefinition or of the artefact pages.
FURTHER_CONTEXTS: Mapping[str, tuple[str, ...]] = {
    _SD + "structuredefinition-fhir-type": ("ElementDefinition.type",),
    _SD + "regex": ("ElementDefinition.type",),
    _SD + "structuredefinition-normative-version": ("Element",),
    _SD + "elementdefinition-bindingName": ("OperationDefinition.parameter.binding",),
    _SD + "translation": ("ValueSet.expansion.contains",),
    _SD + "valueset-concept-comments": ("CodeSystem.concept",),
}


def extension_rows(structures: Mapping[str, Definition]) -> dict[str, dict[str, Any]]:
    """A row for each extension definition, by canonical."""
    return {
        url: extension_row(definition)
        for url, definition in structures.items()
        if definition.get("type") == "Extension"
        and definition.get("derivation") == "constraint"
        and "snapshot" in definition
    }


def extension_row(definition: Definition) -> dict[str, Any]:
    """One extension: t value types, c contexts, m modifier, p parts, r required parts, b binding."""
    row: dict[str, Any] = {}
    elements = definition["snapshot"]["element"]
    contexts = [
        [str(c.get("type", "")), str(c.get("expression", ""))]
        for c in definition.get("context", ())
        if isinstance(c, Mapping)
    ]
    if contexts:
        further = FURTHER_CONTEXTS.get(str(definition.get("url")), ())
        row["c"] = contexts + [["element", path] for path in further]
    if elements[0].get("isModifier"):
        row["m"] = 1
    slices: dict[str, tuple[str, int, list[str]]] = {}
    for element in elements:
        ident = str(element.get("id", ""))
        depth = ident.count(".")
        if depth == 1 and ident.split(".")[1].startswith("value[x]") and ":" not in ident:
            if element.get("max") != "0":
                row["t"] = sorted({t["code"] for t in element.get("type", ())})
                bound = binding_row(element.get("binding"))
                if bound:
                    row["b"] = bound
        elif ident.startswith("Extension.extension:"):
            _part(ident, element, slices)
    parts = {url: types for url, _, types in slices.values() if url}
    if parts:
        row["p"] = parts
        required = sorted(url for url, least, _ in slices.values() if url and least)
        if required:
            row["r"] = required
    return row


def _part(ident: str, element: Definition, slices: dict[str, tuple[str, int, list[str]]]) -> None:
    name, _, rest = ident.removeprefix("Extension.extension:").partition(".")
    url, least, types = slices.get(name, ("", 0, []))
    if not rest:
        least = int(element.get("min", 0))
    elif rest == "url":
        url = str(element.get("fixedUri", ""))
    elif rest.startswith("value[x]") and ":" not in rest and element.get("max") != "0":
        types = sorted({t["code"] for t in element.get("type", ())})
    slices[name] = (url, least, types)
