"""The form that a map reads, as a FHIR Questionnaire: one item a field, with the wordings that it knows.

Source: FHIR R4 Questionnaire (item types, answerOption, constraint que-1 to que-13).
"""

from __future__ import annotations

import hashlib
from collections.abc import Iterator, Mapping
from typing import Any
from urllib.parse import quote

from fhirgallop.codes import systems
from fhirgallop.exam import catalogue
from fhirgallop.mapping.template_map import ChoiceList, Line, TemplateMap
from fhirgallop.observations.text import plain

Item = dict[str, Any]


def blank_form(template: TemplateMap, edition: str) -> Mapping[str, Any]:
    """A Questionnaire whose linkIds are the map's fields, so that its answers can be sent through the map."""
    items: dict[str, Item] = {}
    for name in template.record.fields():
        items.setdefault(name, {"linkId": name, "text": name, "type": "string", "required": True})
    for line in template.lines:
        for name, item in _items(line, edition):
            items.setdefault(name, item)
    return {
        "resourceType": "Questionnaire",
        "url": f"{systems.BASE}/Questionnaire/{quote(template.name, safe='')}",
        "version": template.version,
        "name": "Form_" + hashlib.sha256(template.name.encode()).hexdigest()[:16],
        "title": plain(template.title) or template.name,
        "status": "active",
        "item": list(items.values()),
    }


def _items(line: Line, edition: str) -> Iterator[tuple[str, Item]]:
    label = catalogue.load().findings[line.finding].label if line.finding else ""
    if line.field:
        numeric = line.number is not None and line.choice is None and not line.number.split
        yield line.field, _item(line.field, label, line.choice or line.named, edition, numeric=numeric)
    for source in line.qualifiers:
        if source.field:
            words = f"{label}: {catalogue.load().axes[source.axis].label}"
            yield source.field, _item(source.field, words, source.choice, edition)
    if line.note:
        yield line.note, {"linkId": line.note, "text": f"{label or 'Examination'}: remark", "type": "text"}


def _item(name: str, label: str, choice: ChoiceList | None, edition: str, *, numeric: bool = False) -> Item:
    item: Item = {"linkId": name, "text": label or name}
    if numeric:
        return {**item, "type": "decimal"}
    if choice is None:
        return {**item, "type": "string"}
    item["type"] = "choice" if edition != "R5" else "coding"
    if choice.several:
        item["repeats"] = True
    item["answerOption"] = [{"valueString": wording} for wording in choice.meanings if plain(wording)]
    return item
