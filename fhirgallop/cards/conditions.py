"""The conditions of a rule in plain words, so that a clinician can sign for exactly what is judged."""

from __future__ import annotations

from typing import Final

from fhirgallop.cards import words
from fhirgallop.exam import catalogue
from fhirgallop.exam.context import Source
from fhirgallop.exam.entry import Measure
from fhirgallop.reasoning.atoms import Atom, Bound, Having, OfSubject
from fhirgallop.reasoning.conditions import All, Any, Condition, Count, First, Not
from fhirgallop.reasoning.measured import Computed, Given, Judged
from fhirgallop.reasoning.vocabulary import Window

_WANTED: Final = {
    "present": "present",
    "absent": "explicitly absent",
    "ever": "present or in the history",
    "recorded": "recorded",
}
EVERYTHING_ELSE_WINDOW: Final = "encounter"
UNSAID: Final = (
    "Where nothing else is said, a datum counts when it is of this encounter and of the last 24 hours, or "
    "for good (age, devices, operations, diagnoses); what nobody recorded is unknown and completes nothing."
)
_BOUNDS: Final = {"above": "above", "at-least": "at least", "at-most": "at most", "below": "below"}


def in_words(condition: Condition) -> str:
    """One condition as a phrase; groups stand in brackets."""
    match condition:
        case Atom():
            return _atom(condition)
        case OfSubject():
            return f"this very finding has {_having(condition.having)}"
        case All():
            return _group("all of", _flat(condition.parts, All))
        case Any():
            return _group("any of", _flat(condition.parts, Any))
        case First():
            return _group("the first of these that is known", condition.parts)
        case Count():
            return _group(f"at least {condition.least} of", condition.parts)
        case Not():
            return f"not ({in_words(condition.part)})"
        case _:
            return _measured(condition)


def _measured(condition: Condition) -> str:
    if isinstance(condition, Judged):
        answers = " or ".join(sorted(condition.answers))
        edition = f" ({condition.edition})" if condition.edition else ""
        return f"{condition.classification}{edition} gives {answers}, from {_inputs(condition.given)}"
    if isinstance(condition, Computed):
        return f"{condition.computation} {_bounds(condition.bounds)}, from {_inputs(condition.given)}"
    raise TypeError(f"no words for {type(condition).__name__}")


def _group(kind: str, parts: tuple[Condition, ...]) -> str:
    if len(parts) == 1:
        return in_words(parts[0])
    return f"{kind} ({'; '.join(in_words(part) for part in parts)})"


def _flat(parts: tuple[Condition, ...], kind: type[All | Any]) -> tuple[Condition, ...]:
    """A group of its own kind within a group says nothing more."""
    found: list[Condition] = []
    for part in parts:
        found += _flat(part.parts, kind) if isinstance(part, kind) else (part,)
    return tuple(found)


def _atom(atom: Atom) -> str:
    said = []
    if atom.answers:
        said.append(" or ".join(words.answer(atom.fact, answer) for answer in sorted(atom.answers)))
    if atom.bounds:
        said.append(_bounds(atom.bounds))
    if not said or atom.want in ("absent", "ever"):
        said.insert(0, _WANTED[atom.want])
    parts = [f"{words.label(atom.fact)}: {' '.join(said)}"]
    if atom.having:
        parts.append(f"with {_having(atom.having)}")
    if atom.matching:
        parts.append(f"of the same {', '.join(words.axis(axis) for axis in atom.matching)}")
    if atom.sources:
        parts.append(f"from {' or '.join(words.source(name) for name in sorted(atom.sources))}")
    if atom.sources != {Source.EXAM} and (age := _window(atom.window)):
        parts.append(age)
    return ", ".join(parts)


def _having(having: tuple[Having, ...]) -> str:
    return ", ".join(_property(one) for one in having)


def _property(one: Having) -> str:
    if one.axis == "grade":
        low = "" if one.low is None else f" at least {one.low}"
        high = "" if one.high is None else f" at most {one.high}"
        return f"grade{low}{high}" + (f" of {one.of}" if one.of else "")
    known = catalogue.load().axes.get(one.axis)
    values = (known.values[v].label if known and v in known.values else v for v in sorted(one.values))
    return f"{words.axis(one.axis)}: {' or '.join(values)}"


def _bounds(bounds: tuple[Bound, ...]) -> str:
    return " and ".join(
        f"{_BOUNDS[bound.op]} {words.number(Measure(bound.cutoff.value, bound.cutoff.unit))}"
        for bound in bounds
    )


def _inputs(given: tuple[Given, ...]) -> str:
    return ", ".join(dict.fromkeys(words.label(one.fact) for one in given if one.fact))


def _window(window: Window) -> str:
    if window.within is None or window.name == EVERYTHING_ELSE_WINDOW:
        return ""
    if window.same_encounter:
        return f"of this encounter and the last {words.span(window.within)}"
    return f"of the last {words.span(window.within)}" + ("" if window.drops else " (older weighs less)")
