"""The JSON Schema of template maps, made from the grammar.

Source: JSON Schema 2020-12. Editors use it to complete and to underline; the reader says more than it can.
"""

from __future__ import annotations

from typing import Any, Final

from fhirgallop.mapping.grammar import GROUPS, MAP, Either, Group, ListOf, Ref, Shape, TableOf, Word

ADDRESS: Final = "https://fhirgallop.org/schema/template-map-1.json"


def schema() -> dict[str, Any]:
    """The schema as plain data; `template_map.schema.json` beside this module holds the same."""
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        "$id": ADDRESS,
        "title": "fhirgallop template map",
        **_of(MAP),
        "$defs": {name: _of(group) for name, group in GROUPS.items()},
    }


def _of(shape: Shape) -> dict[str, Any]:
    match shape:
        case Word():
            return _word(shape)
        case ListOf():
            bounds = {"minItems": shape.exactly or 1} | ({"maxItems": shape.exactly} if shape.exactly else {})
            return _about(shape.about) | {"type": "array", "items": _of(shape.each)} | bounds
        case TableOf():
            return _about(shape.about) | {"type": "object", "additionalProperties": _of(shape.each)}
        case Ref():
            return {"$ref": f"#/$defs/{shape.name}"}
        case Either():
            return {"anyOf": [_of(shape.short), _of(shape.long)]}
        case Group():
            return _group(shape)
    raise AssertionError(shape)  # pragma: no cover  (every shape stands above)


def _group(group: Group) -> dict[str, Any]:
    found: dict[str, Any] = _about(group.about) | {
        "type": "object",
        "properties": {key.name: _of(key.shape) for key in group.keys},
        "additionalProperties": False,
    }
    if required := [key.name for key in group.keys if key.required]:
        found["required"] = required
    if group.one_of:
        found["anyOf"] = [{"required": [name]} for name in group.one_of]
    return found


def _word(word: Word) -> dict[str, Any]:
    """Whoever loads YAML may get `1` as a number and `true` as a truth value; both are the text written."""
    if word.words:
        return _about(word.about) | {"enum": [spelled for w in word.words for spelled in _spellings(w)]}
    found: dict[str, Any] = {"type": ["string", "number", "boolean"]}
    if word.pattern:
        found["pattern"] = word.pattern
    return _about(word.about) | found


def _spellings(word: str) -> list[Any]:
    if word in ("true", "false"):
        return [word == "true", word]
    return [word, int(word)] if word.isdecimal() else [word]


def _about(text: str) -> dict[str, Any]:
    return {"description": text} if text else {}
