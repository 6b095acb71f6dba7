"""Writes value sets out to codes by system, as far as their code systems are at hand.

Source: FHIR ValueSet.compose (include, exclude, concept, filter, valueSet), CodeSystem.content.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any

from fhirgallop.conformance.editions.model import ValueSet

Definition = Mapping[str, Any]


@dataclass(slots=True)
class Codes:
    """Codes by system while a set is put together; `whole` systems are taken entire, `unlisted` unknown."""

    listed: dict[str, set[str]] = field(default_factory=dict)
    whole: set[str] = field(default_factory=set)
    unlisted: set[str] = field(default_factory=set)


class Expander:
    """Expands value sets over the definitions given, the first place that has one being preferred."""

    def __init__(
        self,
        value_sets: Mapping[str, Definition],
        code_systems: Mapping[str, Definition],
        known: Callable[[str], ValueSet | None] = lambda _: None,
    ) -> None:
        """`known` gives value sets that were written out before."""
        self._known = known
        self._sets = value_sets
        self._systems = code_systems
        self._concepts: dict[str, dict[str, str]] = {}

    def codes_of(self, system: str) -> dict[str, str] | None:
        """Every code of a complete code system with its parent's code; None when it cannot be enumerated."""
        if system not in self._concepts:
            definition = self._systems.get(system)
            if definition is None or definition.get("content") != "complete" or not definition.get("concept"):
                return None
            self._concepts[system] = dict(_walk(definition["concept"], ""))
        return self._concepts[system]

    def expand(self, url: str, seen: frozenset[str] = frozenset()) -> Codes | None:
        """The codes of a value set, or None when it is not at hand."""
        definition = self._sets.get(url.partition("|")[0])
        if definition is None:
            ready = self._known(url.partition("|")[0])
            if ready is None:
                return None
            return Codes(
                {s: set(codes) for s, codes in ready.systems.items()}, unlisted=set(ready.open_systems)
            )
        if url in seen:
            return None
        compose = definition.get("compose")
        if not isinstance(compose, Mapping):
            return _from_expansion(definition)
        result = Codes()
        for part in compose.get("include", ()):
            codes = self._part(part, seen | {url})
            if codes is None:
                return None
            for system, found in codes.listed.items():
                result.listed.setdefault(system, set()).update(found)
            result.whole |= codes.whole
            result.unlisted |= codes.unlisted
        for part in compose.get("exclude", ()):
            codes = self._part(part, seen | {url})
            for system, found in (codes.listed if codes else {}).items():
                if system in result.listed and found:
                    result.listed[system] -= found
                    result.whole.discard(system)
        return result

    def _part(self, part: Definition, seen: frozenset[str]) -> Codes | None:
        imported: Codes | None = None
        for url in part.get("valueSet", ()):
            other = self.expand(url, seen)
            if other is None:
                return None
            imported = other if imported is None else _both(imported, other)
        system = part.get("system")
        if system is None:
            return imported or Codes()
        own = self._of_system(system, part)
        return own if imported is None else _both(imported, own)

    def _of_system(self, system: str, part: Definition) -> Codes:
        if "concept" in part:
            return Codes({system: {c["code"] for c in part["concept"]}})
        concepts = self.codes_of(system)
        if concepts is None:
            return Codes(unlisted={system})
        found = set(concepts)
        for rule in part.get("filter", ()):
            kept = self._filter(system, concepts, rule)
            if kept is None:
                return Codes(unlisted={system})
            found &= kept
        return Codes({system: found}, whole=set() if part.get("filter") else {system})

    def _filter(self, system: str, concepts: Mapping[str, str], rule: Definition) -> set[str] | None:
        op, value = rule.get("op"), rule.get("value")
        if rule.get("property") == "concept" and op in ("is-a", "descendent-of", "is-not-a"):
            below = {code for code in concepts if value in _line(code, concepts)}
            if op == "is-not-a":
                return set(concepts) - below
            return below - {str(value)} if op == "descendent-of" else below
        if op == "=":
            flat = _flat(self._systems[system].get("concept", ()))
            name = rule.get("property")
            return {
                str(c.get("code"))
                for c in flat
                for p in c.get("property", ())
                if p.get("code") == name and any(str(v) == value for k, v in p.items() if k != "code")
            } or None
        return None


def _walk(concepts: Iterable[Definition], parent: str) -> Iterator[tuple[str, str]]:
    for concept in concepts:
        above = parent or next(
            (
                str(p.get("valueCode", ""))
                for p in concept.get("property", ())
                if p.get("code") in ("subsumedBy", "parent")
            ),
            "",
        )
        yield concept["code"], above
        yield from _walk(concept.get("concept", ()), concept["code"])


def _flat(concepts: Iterable[Definition]) -> Iterator[Definition]:
    for concept in concepts:
        yield concept
        yield from _flat(concept.get("concept", ()))


def _line(code: str, concepts: Mapping[str, str]) -> set[str]:
    line: set[str] = set()
    while code and code not in line:
        line.add(code)
        code = concepts.get(code, "")
    return line


def _both(one: Codes, other: Codes) -> Codes:
    """Codes in both; a system that either cannot enumerate stays unlisted."""
    systems = one.listed.keys() & other.listed.keys()
    return Codes(
        {s: one.listed[s] & other.listed[s] for s in systems},
        {s for s in systems if s in one.whole and s in other.whole},
        (one.unlisted & (other.unlisted | other.listed.keys())) | (other.unlisted & one.listed.keys()),
    )


def _from_expansion(definition: Definition) -> Codes | None:
    contains = definition.get("expansion", {}).get("contains")
    if not contains:
        return None
    listed: dict[str, set[str]] = {}
    stack = list(contains)
    while stack:
        entry = stack.pop()
        if "system" in entry and "code" in entry:
            listed.setdefault(entry["system"], set()).add(entry["code"])
        stack.extend(entry.get("contains", ()))
    return Codes(listed)
