"""What one filled box says, as an Entry that is not yet described: one function per way of reading."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

from fhirgallop.codes.units import UnitTable
from fhirgallop.exam.catalogue import FindingDefinition
from fhirgallop.exam.entry import Entry, Measure, Qualifier
from fhirgallop.exam.presence import Presence
from fhirgallop.intake.record import Value
from fhirgallop.mapping import amounts, grades
from fhirgallop.mapping.meanings import GRADE
from fhirgallop.mapping.run import Run
from fhirgallop.mapping.template_map import ChoiceList, Line, Meaning
from fhirgallop.mapping.wordings import Blanks, Lookup, words_of

Says = Callable[[Run, tuple[Value, ...]], Entry | None]


@dataclass(frozen=True, slots=True)
class Policy:
    """What holds for the whole map: unknown wordings travel as text; local wordings are kept as codings."""

    keep_unknown: bool
    keep_local: bool


class Nothing:
    """What a wording means that says nothing (`not-recorded`)."""


NOTHING = Nothing()


def qualifier(axis: str, value: str) -> Qualifier:
    """A constant qualifier; a grade is written with its scale."""
    if axis == GRADE:
        grade = grades.read(value, 0)
        return Qualifier(axis, grade=grade if not isinstance(grade, str) else None)
    return Qualifier(axis, value)


def entry_of(line: Line, wording: str, meaning: Meaning, policy: Policy) -> Entry | Nothing:
    """The entry that one wording of a line's list stands for, made once."""
    if meaning.presence is None:
        return NOTHING
    return Entry(
        finding=meaning.finding or line.finding,
        presence=meaning.presence,
        answers=(meaning.answer,) if meaning.answer else (),
        qualifiers=tuple(qualifier(axis, value) for axis, value in sorted(meaning.qualifiers)),
        instance=line.instance,
        reason=meaning.reason,
        fields=(line.field,),
        said=wording if policy.keep_local else "",
    )


def lookup(line: Line, choice: ChoiceList, policy: Policy) -> Lookup[Entry | Nothing]:
    """Wording -> entry."""
    return Lookup({wording: entry_of(line, wording, m, policy) for wording, m in choice.meanings.items()})


def tokens(values: tuple[Value, ...], separator: str) -> Iterator[Value]:
    """The single wordings of a box that may hold several."""
    for value in values:
        if separator and isinstance(value, str):
            yield from filter(None, (piece.strip() for piece in value.split(separator)))
        else:
            yield value


def unknown_text(choice: ChoiceList, *, kept: bool) -> str:
    """The message for a wording that a list does not hold; it shows ours, never theirs."""
    known = list(choice.meanings)
    shown = ", ".join(known[:8]) + (" ..." if len(known) > 8 else "")
    cure = (
        "it travels as text; add it to the map"
        if kept
        else "correct the record, or add the wording to the map"
    )
    return f"This wording is not among those that line {choice.line} of the map knows ({shown}): {cure}."


def several(run: Run, line: Line) -> None:
    """Notes that a box holds several values where one is needed."""
    words = (
        f"The field holds several values, which do not say one thing; line {line.line} of the map reads one. "
        "Send one, send each in a field of its own, or write choices: in the map."
    )
    run.issue("error", "value", "map-several-values", words, line.field)


def choice_box(line: Line, choice: ChoiceList, definition: FindingDefinition, policy: Policy) -> Says:
    """A box that holds one wording of a list."""
    table = lookup(line, choice, policy)
    message = unknown_text(choice, kept=policy.keep_unknown)

    def says(run: Run, values: tuple[Value, ...]) -> Entry | None:
        found = table.find(values[0])
        if len(values) > 1 and any(table.find(value) != found for value in values):
            several(run, line)
            return None
        if found is not None:
            return found if isinstance(found, Entry) else None
        run.unknown_value("warning" if policy.keep_unknown else "error", message, line.field, values[0])
        # Kept words of a sign say neither present nor absent.
        kept_as = Presence.UNCERTAIN if definition.kind == "sign" else Presence.PRESENT
        return _in_words(line, words_of(values[0]), kept_as) if policy.keep_unknown else None

    return says


def choices_box(line: Line, choice: ChoiceList, policy: Policy) -> Says:
    """A box that may hold several answers of a choice finding."""
    table = lookup(line, choice, policy)
    message = unknown_text(choice, kept=False)

    def says(run: Run, values: tuple[Value, ...]) -> Entry | None:
        found: dict[Entry, None] = {}
        for token in tokens(values, choice.separator):
            entry = table.find(token)
            if entry is None:
                run.unknown_value("error", message, line.field, token)
            elif isinstance(entry, Entry):
                found[entry] = None
        return _together(run, line, list(found))

    return says


def _together(run: Run, line: Line, found: list[Entry]) -> Entry | None:
    if len(found) > 1 and any(entry.presence is not Presence.PRESENT for entry in found):
        several(run, line)
        return None
    if not found or not found[0].answers:
        return found[0] if found else None
    apart: dict[str, Entry] = {}
    for entry in found:
        for answer in entry.answers:
            same = apart.get(answer, entry)
            qualifiers = tuple(dict.fromkeys((*same.qualifiers, *entry.qualifiers)))
            instance = f"{line.instance}/{answer}"
            apart[answer] = replace(same, answers=(answer,), qualifiers=qualifiers, instance=instance)
    return replace(
        found[0],
        answers=tuple(apart),
        qualifiers=tuple(dict.fromkeys(q for entry in found for q in entry.qualifiers)),
        said=found[0].said if len(apart) == 1 else "",
        apart=tuple(apart.values()),
    )


def text_box(line: Line, policy: Policy) -> Says:
    """A box of free words; those of the line's list have a meaning of their own."""
    table = lookup(line, line.choice, policy) if line.choice else None

    def says(_run: Run, values: tuple[Value, ...]) -> Entry | None:
        if table and (found := table.find(values[0])) is not None:
            return found if isinstance(found, Entry) else None
        return _in_words(line, "\n".join(words_of(value) for value in values), Presence.PRESENT)

    return says


def _in_words(line: Line, words: str, presence: Presence) -> Entry:
    return Entry(line.finding, presence, text=words, instance=line.instance, fields=(line.field,))


def number_box(
    line: Line,
    definition: FindingDefinition,
    units: UnitTable,
    policy: Policy,
    blanks: Blanks,
    *,
    parts: int,
    blank: Entry | None,
) -> Says:
    """A box that holds a number.

    `parts` is how many numbers of it the whole map reads; `blank` what it says where this one is blank.
    """
    form = line.number
    if form is None:  # pragma: no cover  (the caller asks only for lines with a number)
        raise ValueError(line)
    table = lookup(line, line.choice, policy) if line.choice else None
    read = amounts.reader(form, units.by_code[definition.unit], units, blanks.is_blank)

    def says(run: Run, values: tuple[Value, ...]) -> Entry | None:
        if len(values) > 1:
            several(run, line)
            return None
        value = values[0]
        if table and (found := table.find(value)) is not None:
            return found if isinstance(found, Entry) else None
        measure = read(value)
        if measure is None:
            return blank
        if not isinstance(measure, Measure):
            run.issue(
                "error", measure.code, measure.rule, f"The value cannot be used: {measure.text}.", line.field
            )
            return None
        if form.part == parts and amounts.parts_in(value, form) > parts:
            words = (
                f"The box holds more than the {parts} numbers that the map reads; add a line for the others."
            )
            run.issue("warning", "incomplete", "map-part-unread", words, line.field)
        return Entry(line.finding, measure=measure, instance=line.instance, fields=(line.field,))

    return says
