"""What contradicts itself across the lines of a map."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Final

from fhirgallop.exam.presence import Presence
from fhirgallop.mapping.document import clip
from fhirgallop.mapping.faults import Faults
from fhirgallop.mapping.template_map import (
    AllOf,
    AnyOf,
    ChoiceList,
    Condition,
    FieldBlank,
    FieldIs,
    Line,
    TemplateMap,
)

_SAID: Final = (Presence.PRESENT, Presence.ABSENT, Presence.UNCERTAIN)


def check(template: TemplateMap, faults: Faults) -> None:
    """Notes every contradiction between lines."""
    _read_and_ignored(template, faults)
    _given_twice(template, faults)
    _blank_wordings(template, faults)
    for line in template.lines:
        if line.presence in _SAID and not line.when:
            words = (
                f"This line would say {line.presence} in every record; add when, so that something in the "
                "record says it."
            )
            faults.add(line.line, "map-constant-without-condition", words, code="business-rule")
        if line.when and not _can_hold(line.when):
            words = (
                "This line can never apply: its condition contradicts itself. Correct when, "
                "or remove the line."
            )
            faults.add(line.line, "map-line-never-applies", words, code="business-rule")
        elif line.field and line.blank_means == "not-recorded" and _asks_blank(line.when, line.field):
            words = (
                "This line can never say anything: it is read only when its own field "
                f"{clip(line.field)} is blank."
            )
            faults.add(line.line, "map-line-never-applies", words, code="business-rule")


def _read_and_ignored(template: TemplateMap, faults: Faults) -> None:
    read: dict[str, int] = {}
    for name in template.record.fields():
        read.setdefault(name, template.record.patient.line)
    for line in template.lines:
        for name in line.reads():
            read.setdefault(name, line.line)
    for ignored in template.ignored:
        if ignored.pattern.strip("*") == "":
            words = (
                "This pattern would ignore every field, so that nothing unread could be "
                "noticed; name the fields."
            )
            faults.add(ignored.line, "map-ignores-everything", words, code="business-rule")
            continue
        exact = "*" not in ignored.pattern
        names = [ignored.pattern] if exact and ignored.pattern in read else []
        if not exact:
            names = [name for name in read if ignored.covers(name)]
        if names:
            words = (
                f"The field {clip(names[0])} is ignored here but read in line "
                f"{read[names[0]]}; remove one of the two"
                f"{' or narrow the pattern' if not exact else ''}."
            )
            faults.add(ignored.line, "map-read-and-ignored", words, code="business-rule")


def _given_twice(template: TemplateMap, faults: Faults) -> None:
    first: dict[tuple[str, str], int] = {}
    for line in template.lines:
        if line.when:
            continue
        for finding, instance in line.gives():
            before = first.setdefault((finding, instance), line.line)
            if before != line.line:
                words = (
                    f"{finding} is given by line {before} and again here, in every "
                    "record; give one of them an "
                    "instance of its own, a condition (when), or remove it."
                )
                faults.add(line.line, "map-given-twice", words, code="business-rule")


def _choices(line: Line) -> Iterator[ChoiceList]:
    for choice in (line.choice, line.named, *(source.choice for source in line.qualifiers)):
        if choice:
            yield choice


def _blank_wordings(template: TemplateMap, faults: Faults) -> None:
    blanks = {wording.strip().casefold() for wording in template.blanks}
    for line in template.lines:
        for choice in _choices(line):
            for wording, meaning in choice.meanings.items():
                if wording.strip().casefold() in blanks or not wording.strip():
                    words = (
                        f"The wording {clip(wording)} can never be met: it counts as an "
                        "empty box. Remove it here or "
                        "below blanks; blank-means says what an empty box means."
                    )
                    faults.add(meaning.line or line.line, "map-wording-is-blank", words, code="business-rule")
                elif choice.separator and choice.separator in wording:
                    words = (
                        f"The wording {clip(wording)} holds the separator "
                        f"{choice.separator!r}, so it can never be met."
                    )
                    faults.add(meaning.line or line.line, "map-wording-is-split", words, code="business-rule")


def _can_hold(condition: Condition) -> bool:
    """False when the condition contradicts itself as far as `all` and `any` show it."""
    if isinstance(condition, AnyOf):
        return any(_can_hold(part) for part in condition.parts)
    allowed: dict[str, set[str]] = {}
    blank: dict[str, bool] = {}
    for part in _conjuncts(condition):
        if isinstance(part, AnyOf) and not _can_hold(part):
            return False
        if isinstance(part, FieldIs):
            words = {word.strip().casefold() for word in part.words}
            allowed[part.field] = allowed.get(part.field, words) & words
            if not allowed[part.field]:
                return False
        elif isinstance(part, FieldBlank) and blank.setdefault(part.field, part.blank) != part.blank:
            return False
    return not any(is_blank and name in allowed for name, is_blank in blank.items())


def _conjuncts(condition: Condition) -> Iterator[Condition]:
    if isinstance(condition, AllOf):
        for part in condition.parts:
            yield from _conjuncts(part)
    else:
        yield condition


def _asks_blank(condition: Condition | None, field: str) -> bool:
    return condition is not None and any(
        isinstance(part, FieldBlank) and part.blank and part.field == field for part in _conjuncts(condition)
    )
