"""Qualifiers and remarks of a finding, read from the boxes that describe it."""

from __future__ import annotations

from collections.abc import Callable

from fhirgallop.exam.checks import ALSO_OF_ABSENT
from fhirgallop.exam.entry import Entry, Qualifier
from fhirgallop.exam.presence import Presence
from fhirgallop.intake.record import Value
from fhirgallop.mapping import grades
from fhirgallop.mapping.boxes import Policy, qualifier, tokens, unknown_text
from fhirgallop.mapping.run import Run
from fhirgallop.mapping.template_map import ChoiceList, QualifierSource
from fhirgallop.mapping.wordings import Lookup, wordings, words_of

Describes = Callable[[Run, tuple[Value, ...]], list[Qualifier]]


def constants(sources: tuple[QualifierSource, ...]) -> Callable[[Entry], list[Qualifier]]:
    """The constant qualifiers of a line, for an entry: how it sounded is said only of what was there."""
    found = [qualifier(source.axis, source.constant) for source in sources if source.constant]
    of_absent = [q for q in found if q.axis in ALSO_OF_ABSENT]

    def given(entry: Entry) -> list[Qualifier]:
        return found if entry.presence in (Presence.PRESENT, Presence.UNCERTAIN) else of_absent

    return given


def describer(source: QualifierSource, policy: Policy) -> Describes:
    """A function from the filled box of a qualifier to the qualifiers it says."""
    if source.choice:
        return _choice(source, source.choice, policy)
    if source.grade_of:
        return _grade(source, policy)
    return lambda _run, values: [Qualifier(source.axis, text=words_of(value)) for value in values]


def _choice(source: QualifierSource, choice: ChoiceList, policy: Policy) -> Describes:
    """Prepared qualifiers by wording; an empty list for a wording that says nothing."""
    axis, name = source.axis, source.field
    table = Lookup(
        {
            wording: [Qualifier(axis, meaning.answer)] if meaning.presence else []
            for wording, meaning in choice.meanings.items()
        }
    )
    message = unknown_text(choice, kept=policy.keep_unknown)

    def describes(run: Run, values: tuple[Value, ...]) -> list[Qualifier]:
        found: list[Qualifier] = []
        for token in tokens(values, choice.separator):
            known = table.find(token)
            if known is not None:
                found += known
                continue
            run.unknown_value("warning" if policy.keep_unknown else "error", message, name, token)
            if policy.keep_unknown:
                found.append(Qualifier(axis, text=words_of(token)))
        if len(found) > 1 and not choice.several and any(one != found[0] for one in found):
            _several(run, source)
            return []
        return found

    return describes


def _grade(source: QualifierSource, policy: Policy) -> Describes:
    def describes(run: Run, values: tuple[Value, ...]) -> list[Qualifier]:
        if len(values) > 1:
            _several(run, source)
            return []
        reason = ""
        for text in wordings(values[0]):
            grade = grades.read(text, source.grade_of)
            if not isinstance(grade, str):
                return [Qualifier(source.axis, grade=grade)]
            reason = reason or grade
        if policy.keep_unknown:
            words = f"The grade cannot be read: {reason}; it travels as text."
            run.issue("warning", "value", "map-grade-unreadable", words, source.field)
            return [Qualifier(source.axis, text=words_of(values[0]))]
        words = f"The grade cannot be used: {reason}. Correct it."
        run.issue("error", "value", "map-grade-unreadable", words, source.field)
        return []

    return describes


def _several(run: Run, source: QualifierSource) -> None:
    words = (
        f"The field holds several values where line {source.line} of the map reads one; "
        "send one, or write choices: "
        "in the map."
    )
    run.issue("error", "value", "map-several-values", words, source.field)
