"""Conditions of a map as functions of the record being read."""

from __future__ import annotations

from collections.abc import Iterator

from fhirgallop.mapping.run import Run, Test
from fhirgallop.mapping.template_map import AllOf, AnyOf, Condition, FieldBlank, FieldIs, Not, TemplateMap
from fhirgallop.mapping.wordings import Blanks, Lookup


def test_of(condition: Condition, blanks: Blanks) -> Test:
    """The function that tells whether `condition` holds."""
    match condition:
        case FieldIs(field=name, words=words):
            return _field_is(name, words, blanks)
        case FieldBlank(field=name, blank=blank):
            return lambda run: (not blanks.filled(run.fields.get(name))) is blank
        case AllOf(parts):
            tests = [test_of(part, blanks) for part in parts]
            return lambda run: all(test(run) for test in tests)
        case AnyOf(parts):
            tests = [test_of(part, blanks) for part in parts]
            return lambda run: any(test(run) for test in tests)
        case Not(part):
            inner = test_of(part, blanks)
            return lambda run: not inner(run)


def _field_is(name: str, words: tuple[str, ...], blanks: Blanks) -> Test:
    table = Lookup(dict.fromkeys(words, True))

    def holds(run: Run) -> bool:
        return any(table.find(value) for value in blanks.filled(run.fields.get(name)))

    return holds


def only_tested(template: TemplateMap) -> dict[str, Lookup[bool]]:
    """Fields that nothing but conditions look at, each with the wordings that some condition lists."""
    listed: dict[str, dict[str, bool]] = {}
    for line in template.lines:
        for part in _leaves(line.when) if line.when else ():
            words = part.words if isinstance(part, FieldIs) else ()
            listed.setdefault(part.field, {}).update(dict.fromkeys(words, True))
    said = set(template.record.fields()).union(*((line.field, *line.details()) for line in template.lines))
    return {name: Lookup(words) for name, words in listed.items() if name not in said}


def _leaves(condition: Condition) -> Iterator[FieldIs | FieldBlank]:
    match condition:
        case FieldIs() | FieldBlank():
            yield condition
        case AllOf(parts) | AnyOf(parts):
            for part in parts:
                yield from _leaves(part)
        case Not(part):
            yield from _leaves(part)
