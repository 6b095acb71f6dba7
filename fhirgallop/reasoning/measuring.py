"""Reads conditions that lean on haemodynamics: which classification or computation, fed from which facts."""

from __future__ import annotations

from decimal import Decimal, InvalidOperation
from typing import Final

from fhirgallop.haemodynamics import CLASSIFICATIONS, COMPUTATIONS
from fhirgallop.haemodynamics.tables import Input
from fhirgallop.reasoning.atoms import Bound
from fhirgallop.reasoning.block import Block
from fhirgallop.reasoning.conditions import Any, Condition
from fhirgallop.reasoning.defining import Vocabulary
from fhirgallop.reasoning.measured import GRADE_OF_SUBJECT, Computed, Given, Judged, Value
from fhirgallop.reasoning.vocabulary import Window, kinds
from fhirgallop.reasoning.yaml_tree import Text

MEASURED_KEYS: Final = (
    "judge", "compute", "given", "answer", "edition", "at-least", "above", "at-most", "below",
)  # fmt: skip
_NEVER: Final = Any(())
_CONSTANTS: Final[dict[str, Value]] = {"yes": True, "no": False}


def judged(block: Block, words: Vocabulary) -> Condition:
    """`{judge: check.pulse-pressure, given: {...}, answer: [broken]}`."""
    name = block.text("judge", needed=True)
    classification = CLASSIFICATIONS.get(name)
    if classification is None:
        hint = block.faults.near(name, CLASSIFICATIONS)
        block.fault("rules-unknown-computation", f"There is no classification {name}.{hint}")
        return _NEVER
    edition = block.text("edition")
    scheme = classification.schemes.get(edition) if edition else classification.default
    answers = frozenset(block.texts("answer"))
    if scheme is None or not answers or not answers <= set(scheme.grades):
        known = ", ".join(scheme.grades) if scheme else f"editions {', '.join(classification.editions)}"
        block.fault("rules-unknown-answer", f"{name} has {known}.", line=block.line_of("answer"))
    inputs = {i.name: i for i in classification.inputs}
    return Judged(name, _given(block, inputs, words), answers, edition)


def computed(block: Block, bounds: tuple[Bound, ...], words: Vocabulary) -> Condition:
    """`{compute: pressure.pulse, given: {...}, above: 60 mm[Hg]}`."""
    name = block.text("compute", needed=True)
    computation = COMPUTATIONS.get(name)
    if computation is None:
        hint = block.faults.near(name, COMPUTATIONS)
        block.fault("rules-unknown-computation", f"There is no computation {name}.{hint}")
        return _NEVER
    if not bounds or any(bound.cutoff.unit != computation.spec.unit for bound in bounds):
        block.fault("rules-threshold", f"{name} needs a threshold in {computation.spec.unit}.")
    given = _given(block, {i.name: i for i in computation.inputs}, words)
    if missing := sorted(set(computation.spec.needs) - {g.name for g in given}):
        block.fault("rules-missing-key", f"{name} needs {', '.join(missing)}.")
    return Computed(name, given, bounds)


def _given(block: Block, inputs: dict[str, Input], words: Vocabulary) -> tuple[Given, ...]:
    found = []
    for key, value in block.pairs("given"):
        entry = inputs.get(key.text)
        source = value.text if isinstance(value, Text) else ""
        if entry is None:
            hint = block.faults.near(key.text, inputs)
            block.fault("rules-unknown-key", f"There is no input {key.text}.{hint}", line=key.line)
        elif source in kinds():
            _check_unit(block, key.line, entry, source)
            found.append(Given(key.text, source, words.window_of(source)))
        elif source in GRADE_OF_SUBJECT:
            found.append(Given(key.text, source, Window("", None)))
        else:
            constant = _constant(source)
            if constant is None:
                hint = block.faults.near(source, kinds())
                block.fault(
                    "rules-unknown-finding", f"There is no finding or fact {source}.{hint}", line=key.line
                )
            found.append(Given(key.text, "", Window("", None), constant))
    if not found:
        block.fault("rules-missing-key", "A condition on haemodynamics needs given: with its inputs.")
    return tuple(found)


def _check_unit(block: Block, line: int, entry: Input, fact: str) -> None:
    kind = kinds()[fact]
    wanted = {"number": "quantity", "flag": "sign", "choice": "choice"}[entry.kind]
    if kind.kind != wanted:
        block.fault(
            "rules-wrong-kind", f"{entry.name} is a {entry.kind}, {fact} is a {kind.kind}.", line=line
        )
        return
    same = entry.unit == kind.unit or {entry.unit, kind.unit} <= {"1", "{ratio}", "{score}", ""}
    if entry.kind == "number" and not same:
        text = f"{entry.name} is in {entry.unit or '1'}, {fact} in {kind.unit}."
        block.fault("rules-unit", text, line=line)


def _constant(text: str) -> Value | None:
    if text in _CONSTANTS:
        return _CONSTANTS[text]
    try:
        return Decimal(text)
    except InvalidOperation:
        return None
