"""What schemas say beside one another: so that nothing is asked twice of the same value.

Only for schemas as `fast_schema` and `fast_profiles` write them (objects closed, choices by enum).
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

Schema = dict[str, Any]

# keywords that mean something only together
_BOUND = (("contains", "minContains", "maxContains"), ("if", "then"))


def containing(wanted: Any) -> Schema:
    """What holds at least the pattern."""
    if isinstance(wanted, Mapping):
        return {
            "properties": {key: containing(value) for key, value in wanted.items()},
            "required": sorted(wanted),
        }
    if isinstance(wanted, list):
        return {"allOf": [{"contains": containing(item)} for item in wanted]} if wanted else {}
    return {"enum": [wanted]}


def beyond(wanted: Any, held: Sequence[Any]) -> Schema:
    """What `wanted` asks of a value that none of `held` asks: where those hold, the answer says it all."""
    if not isinstance(wanted, dict):
        return {} if wanted is True or False in held else {"not": {}}
    known = [schema for one in held for schema in _parts(one)]
    rest: Schema = {}
    for word, said in wanted.items():
        group = next((g for g in _BOUND if word in g), (word,))
        if any(all(one.get(w) == wanted.get(w) for w in group) for one in known):
            continue
        found = _beyond(word, said, wanted, known)
        if found is not None:
            rest[word] = found
    return rest


def _beyond(word: str, said: Any, wanted: Schema, known: list[Schema]) -> Any:
    """What is left of one keyword; None when nothing is."""
    if word == "properties":
        left = {
            key: more
            for key, part in said.items()
            if (more := beyond(part, [one["properties"][key] for one in known if key in one.get(word, ())]))
        }
        if wanted.get("additionalProperties") is False:
            closed = [set(one.get(word, ())) for one in known if one.get("additionalProperties") is False]
            left |= dict.fromkeys(set.intersection(*closed) - set(said) if closed else (), False)
        return left or None
    if word == "additionalProperties":
        # what is held closes the object too: keys it lets in and this does not are ruled out one by one
        return None if any(one.get(word) is False for one in known) else said
    if word == "required":
        return sorted(set(said).difference(*(one.get(word, ()) for one in known))) or None
    if word == "allOf":
        return [more for part in said if (more := beyond(part, known))] or None
    return said


def _parts(schema: Any) -> Iterator[Schema]:
    """A schema and all that it asks by "allOf"."""
    if isinstance(schema, dict):
        yield schema
        for part in schema.get("allOf", ()):
            yield from _parts(part)


def never_both(one: Schema, other: Schema) -> bool:
    """Whether it is plain that no value meets both: each asks for another value at the same place."""
    firsts, seconds = list(_parts(one)), list(_parts(other))
    return any(
        ("enum" in a and "enum" in b and not any(x == y for x in a["enum"] for y in b["enum"]))
        or any(
            key in a.get("required", ()) and never_both(part, b["properties"][key])
            for key, part in a.get("properties", {}).items()
            if key in b.get("properties", ())
        )
        for a in firsts
        for b in seconds
    )
