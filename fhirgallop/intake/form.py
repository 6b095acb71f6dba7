"""A FHIR Questionnaire looked up by linkId: what each item asks for.

Source: FHIR R4 and R5 Questionnaire (item types and the answers they allow).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Final

from fhirgallop.intake.limits import DEFAULT, Limits

_OPTIONS: Final = ("valueCoding", "valueInteger", "valueDate", "valueTime", "valueString", "valueReference")
_ANSWERS: Final[Mapping[str, tuple[str, ...]]] = {
    "boolean": ("valueBoolean",),
    "decimal": ("valueDecimal",),
    "integer": ("valueInteger",),
    "date": ("valueDate",),
    "dateTime": ("valueDateTime",),
    "time": ("valueTime",),
    "string": ("valueString",),
    "text": ("valueString",),
    "url": ("valueUri",),
    "attachment": ("valueAttachment",),
    "reference": ("valueReference",),
    "quantity": ("valueQuantity",),
    "choice": _OPTIONS,
    "open-choice": _OPTIONS,
    "coding": ("valueCoding", "valueString"),
}
_ANY: Final = tuple({answer for answers in _ANSWERS.values() for answer in answers})


@dataclass(frozen=True, slots=True)
class Item:
    """What an item of a form asks for.

    Attributes:
        type: item type as the form says.
        answers: the answer elements that fit the type.
        required: an answer must be given where the item is shown.
        conditional: it, or a group around it, is shown under a condition only.
        parent: linkId of the item around it; empty at the top.
    """

    type: str
    answers: tuple[str, ...]
    required: bool
    conditional: bool
    parent: str


@dataclass(frozen=True, slots=True)
class Form:
    """A form's canonical address and its items by linkId."""

    url: str
    items: Mapping[str, Item]


def index(questionnaire: Mapping[str, Any], limits: Limits = DEFAULT) -> Form:
    """The items of a Questionnaire by linkId; one without, or deeper than the limit, is passed over."""
    items: dict[str, Item] = {}
    waiting: list[tuple[Any, str, bool, int]] = [(questionnaire.get("item"), "", False, 1)]
    while waiting:
        level, parent, conditional, depth = waiting.pop()
        if not isinstance(level, list) or depth > limits.depth:
            continue
        for item in level:
            if not isinstance(item, Mapping) or not isinstance(item.get("linkId"), str):
                continue
            kind = item.get("type")
            kind = kind if isinstance(kind, str) else ""
            hidden = conditional or "enableWhen" in item
            answers = () if kind in ("group", "display") else _ANSWERS.get(kind, _ANY)
            items[item["linkId"]] = Item(kind, answers, item.get("required") is True, hidden, parent)
            waiting.append((item.get("item"), item["linkId"], hidden, depth + 1))
    url = questionnaire.get("url")
    return Form(url if isinstance(url, str) else "", items)
