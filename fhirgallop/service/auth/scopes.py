"""SMART scopes: the grammar of both versions, and how far a set of them reaches.

Source: SMART App Launch 2.2, "Scopes and Launch Context" (v2 scopes `c r u d s`, granular scopes, how v1
reads as v2). Only `system/` scopes give rights here: what a `patient/` or `user/` scope means hangs on a
launch context, and on the rights of a user, that this service knows nothing of.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any, Final
from urllib.parse import unquote

_SCOPE: Final = re.compile(
    r"(?P<context>patient|user|system)/(?P<type>[A-Z][A-Za-z]{1,63}|\*)\.(?P<does>[a-z]{1,5}|\*)(?:\?(?P<only>\S+))?"
)
_LETTERS: Final = re.compile(r"c?r?u?d?s?")
_FIRST_VERSION: Final = {"read": "rs", "write": "cud", "*": "cruds"}
_LONGEST: Final = 8000
_MOST: Final = 200

Category = tuple[str, str]


@dataclass(frozen=True, slots=True)
class Scope:
    """One scope that was understood.

    Attributes:
        context: patient, user or system.
        type: resource type, or `*`.
        does: the letters of c, r, u, d, s that it holds, in this order.
        categories: the resource must be in each of these categories (system, code); none: no restriction. The
            system "" means a code without one, None any system.
    """

    context: str
    type: str
    does: str
    categories: tuple[tuple[str | None, str], ...] = ()


@dataclass(frozen=True, slots=True)
class Reach:
    """How far a caller's rights go for one type and one kind of interaction.

    Attributes:
        everything: without restriction.
        within: alternatives; a resource that is in each category of one of them is within reach.
    """

    everything: bool = False
    within: tuple[tuple[tuple[str | None, str], ...], ...] = ()

    @property
    def nothing(self) -> bool:
        """True when there is no right at all."""
        return not (self.everything or self.within)

    def admits(self, resource: Mapping[str, Any]) -> bool:
        """Whether a resource is within reach."""
        if self.everything:
            return True
        if not self.within:
            return False
        has = _categories(resource)
        return any(all(_in(wanted, has) for wanted in alternative) for alternative in self.within)


EVERYTHING: Final = Reach(everything=True)
NOTHING: Final = Reach()


@dataclass(frozen=True, slots=True)
class Scopes:
    """What an access token permits.

    Attributes:
        understood: its `system/` scopes.
        refused: how many scopes give nothing here: other contexts, unknown letters, unknown restrictions.
    """

    understood: tuple[Scope, ...] = ()
    refused: int = 0

    def reach(self, type_: str, does: str) -> Reach:
        """How far these go for one type and one letter."""
        fitting = [s for s in self.understood if s.type in (type_, "*") and does in s.does]
        if any(not scope.categories for scope in fitting):
            return EVERYTHING
        return Reach(within=tuple(dict.fromkeys(scope.categories for scope in fitting)))


NO_SCOPES: Final = Scopes()


def read_scopes(text: str) -> Scopes:
    """Scopes as they stand in a token, separated by blanks; what is not understood gives no right."""
    if len(text) > _LONGEST:
        return Scopes(refused=1)
    words = text.split(" ")
    scopes = [scope for word in words[:_MOST] if (scope := read_scope(word))]
    usable = tuple(scope for scope in scopes if scope.context == "system")
    return Scopes(usable, sum(map(bool, words)) - len(usable))


def read_scope(word: str) -> Scope | None:
    """One scope; None when it is none, or has a restriction that cannot be kept here.

    Letters out of order are refused, as the standard allows. Of restrictions only `category` is known: one
    that is not known would widen the scope if it were left out, so that the whole scope is.
    """
    found = _SCOPE.fullmatch(word)
    if not found:
        return None
    does = _FIRST_VERSION.get(found["does"], found["does"])
    if not _LETTERS.fullmatch(does):
        return None
    if found["only"] is None:
        return Scope(found["context"], found["type"], does)
    # restrictions came with v2
    if found["does"] in _FIRST_VERSION:
        return None
    categories = [_restriction(part) for part in found["only"].split("&")]
    known = tuple(category for category in categories if category)
    if len(known) != len(categories):
        return None
    return Scope(found["context"], found["type"], does, known)


def _restriction(part: str) -> tuple[str | None, str] | None:
    """The category that `category=system|code` names."""
    name, _, value = part.partition("=")
    value = unquote(value)
    # a comma is "or", a backslash escapes: neither is read here, so neither is guessed
    if name != "category" or any(sign in value for sign in ",\\ $") or value.count("|") > 1:
        return None
    system, bar, code = value.rpartition("|")
    if not code:
        return None
    return (system if bar else None, code)


def _categories(resource: Mapping[str, Any]) -> set[Category]:
    found: set[Category] = set()
    concepts = resource.get("category")
    for concept in concepts if isinstance(concepts, list) else ():
        codings = concept.get("coding") if isinstance(concept, dict) else None
        for coding in codings if isinstance(codings, list) else ():
            if isinstance(coding, dict) and isinstance(coding.get("code"), str):
                system = coding.get("system")
                found.add((system if isinstance(system, str) else "", coding["code"]))
    return found


def _in(wanted: tuple[str | None, str], has: Iterable[Category]) -> bool:
    system, code = wanted
    return any(code == known and system in (None, other) for other, known in has)
