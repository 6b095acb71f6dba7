"""What schemas say beside one another: so that nothing is asked twice of the same value.

Only for schemas as `fast_schema` and `fast_profiles` write them (objects closed, choices by enum).
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from copy import deepcopy
from typing import Any
from urllib.parse import unquote

from jsonschema_rs import is_valid

Schema = dict[str, Any]

# keywords that mean something only together
_BOUND = (("contains", "minContains", "maxContains"), ("if", "then"), ("properties", "additionalProperties"))


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


_FORM = frozenset({"type", "pattern", "minLength", "maxLength"})


class Logic:
    """Compares and joins schemas whose "$ref" lead to the definitions."""

    def __init__(self, definitions: Mapping[str, Schema]) -> None:
        self._definitions = definitions

    def opened(self, schema: Schema) -> Schema:
        """A copy in which the schema behind a "$ref" stands in its place."""
        if "$ref" not in schema:
            return deepcopy(schema)
        found = deepcopy(self._definitions[unquote(schema["$ref"].removeprefix("#/$defs/"))])
        more = {word: said for word, said in schema.items() if word != "$ref"}
        return {"allOf": [found, more]} if more else found

    def tidy(self, schema: Any) -> Any:
        """The same schema with nothing asked twice, and as much as can be asked in one place."""
        if not isinstance(schema, dict):
            return schema
        tidied = {word: self._tidied(word, said) for word, said in schema.items() if word != "allOf"}
        rest: list[Schema] = []
        for part in self._parts({"allOf": schema.get("allOf", ())}):
            more = self.beyond({w: s for w, s in part.items() if w != "allOf"}, [tidied, *rest])
            if more and "$ref" in tidied:
                tidied = self.tidy(self.opened(tidied))
            left = self._merged(tidied, more) if more else {}
            if left:
                rest.append(left)
        return _without_idle(tidied | {"allOf": rest} if rest else tidied)

    def _tidied(self, word: str, said: Any) -> Any:
        if word in ("properties", "dependentSchemas"):
            return {key: self.tidy(part) for key, part in said.items()}
        if word in ("anyOf", "oneOf"):
            return [self.tidy(part) for part in said]
        return self.tidy(said) if word in ("items", "contains", "if", "then", "not") else said

    def _merged(self, schema: Schema, more: Schema) -> Schema:
        """Adds to a schema what another asks; returns what has to stand apart."""
        if not schema:
            schema |= self.tidy(more)
            return {}
        left: Schema = {}
        taken = {other for word in schema for other in _group(word)}
        for word, said in more.items():
            if word == "required":
                schema[word] = sorted({*schema.get(word, ()), *said})
            elif word == "properties" and "additionalProperties" not in more:
                self._merged_properties(schema, said)
            elif word == "items" and word in schema:
                schema[word] = self.tidy({"allOf": [schema[word], said]})
            elif word in _BOUND[-1] or word in taken:
                left[word] = self._tidied(word, said)
            else:
                schema[word] = self._tidied(word, said)
        return left

    def _merged_properties(self, schema: Schema, more: Schema) -> None:
        held = schema.setdefault("properties", {})
        for key, part in more.items():
            if key not in held:
                if "additionalProperties" not in schema:  # else there is no such key
                    held[key] = self.tidy(part)
            elif isinstance(held[key], dict) and isinstance(part, dict):
                held[key] = self.tidy({"allOf": [held[key], part]})
            elif held[key] is True or part is False:
                held[key] = self.tidy(part)

    def beyond(self, wanted: Any, held: Sequence[Any]) -> Schema:
        """What `wanted` asks of a value that none of `held` asks: where those hold, it says no less."""
        if not isinstance(wanted, dict):
            return {} if wanted is True or False in held else {"not": {}}
        if wanted in held:
            return {}
        known = [schema for one in held for schema in self._parts(one)]
        if "$ref" in wanted:
            wanted = self.opened(wanted)
        rest: Schema = {}
        for word, said in wanted.items():
            if any(all(one.get(w) == wanted.get(w) for w in _group(word)) for one in known):
                continue
            found = self._beyond(word, said, wanted, known)
            if found is not None:
                rest[word] = found
        return rest

    def _beyond(self, word: str, said: Any, wanted: Schema, known: list[Schema]) -> Any:
        """What is left of one keyword; None when nothing is."""
        if word == "properties":
            return self._beyond_properties(said, wanted, known)
        if word == "additionalProperties":
            # what is held closes the object too: keys it lets in and this does not are ruled out one by one
            return None if any(one.get(word) is False for one in known) else said
        if word == "required":
            return sorted(set(said).difference(*(one.get(word, ()) for one in known))) or None
        if word == "items":
            return self.beyond(said, [one[word] for one in known if word in one]) or None
        if word == "allOf":
            return [more for part in said if (more := self.beyond(part, known))] or None
        return said

    def _beyond_properties(self, said: Schema, wanted: Schema, known: list[Schema]) -> Schema | None:
        held = [one.get("properties", {}) for one in known]
        left: Schema = {}
        for key, part in said.items():
            more = self.beyond(part, [properties[key] for properties in held if key in properties])
            if more:
                left[key] = more
        if wanted.get("additionalProperties") is False:
            closed = [
                p.keys()
                for p, one in zip(held, known, strict=True)
                if one.get("additionalProperties") is False
            ]
            if not closed:
                return said  # they say too which keys there may be
            left |= dict.fromkeys(set.intersection(*map(set, closed)) - said.keys(), False)
        return left or None

    def _parts(self, schema: Any) -> Iterator[Schema]:
        """A schema and all that it asks by "allOf" and "$ref"."""
        if isinstance(schema, dict):
            if "$ref" in schema:
                schema = self.opened(schema)
            yield schema
            for part in schema.get("allOf", ()):
                yield from self._parts(part)


def _group(word: str) -> tuple[str, ...]:
    """The keywords that mean something only together with this one, and itself."""
    return next((group for group in _BOUND if word in group), (word,))


def _without_idle(schema: Schema) -> Schema:
    """Without what follows from the rest: the form of listed texts, and that there is at least one."""
    idle: set[str] = set()
    form = {word: said for word, said in schema.items() if word in _FORM}
    if "enum" in schema and form and all(is_valid(form, value) for value in schema["enum"]):
        idle |= form.keys()
    if schema.get("minProperties") == 1 and schema.get("required"):
        idle.add("minProperties")
    if schema.get("minItems") == 1 and "contains" in schema and schema.get("minContains", 1) >= 1:
        idle.add("minItems")
    return _seldom({word: said for word, said in schema.items() if word not in idle})


def _seldom(schema: Schema) -> Schema:
    """Asks which keys rule out one another only of objects that have two keys beside those required."""
    rules = schema.get("dependentSchemas")
    if not rules or "anyOf" in schema or "additionalProperties" not in schema:
        return schema
    required = schema.get("required", ())
    for key, rule in rules.items():
        ruled_out = rule.get("properties", {})
        if rule.keys() != {"properties"} or not all(said is False for said in ruled_out.values()):
            return schema
        if key in required or any(other in required for other in ruled_out):
            return schema
    few = {"maxProperties": len(required) + 1}
    rest = {word: said for word, said in schema.items() if word != "dependentSchemas"}
    return {**rest, "anyOf": [few, {"dependentSchemas": rules}]}


def never_both(one: Schema, other: Schema) -> bool:
    """Whether it is plain that no value meets both: each asks for another value at the same place."""
    firsts, seconds = [one, *one.get("allOf", ())], [other, *other.get("allOf", ())]
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
