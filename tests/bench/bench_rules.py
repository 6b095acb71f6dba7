"""Deciding 200 rules on an examination of 25 entries against building its Bundle; ten times the rules."""

from __future__ import annotations

from collections.abc import Iterator

from bench_build import MOMENT, exam
from measuring import Row, at_most, interleaved, ratio

from fhirgallop.exam.context import Context, Fact, Source, State
from fhirgallop.observations.bundle import encode
from fhirgallop.reasoning.conditions import View
from fhirgallop.reasoning.faults import Faults
from fhirgallop.reasoning.items import collect
from fhirgallop.reasoning.review import review
from fhirgallop.reasoning.rulebook import Rulebook, build, load, shipped_trees
from fhirgallop.reasoning.vocabulary import kinds
from fhirgallop.reasoning.yaml_tree import parse

RELATIONS = ("requires", "contradicts", "expects", "suggests")
RULE = """
  - id: bench.{name}
    row: BENCH-1
    relation: {relation}
    finding: {finding}
    when: {{any: [{{fact: patient.age, at-least: 18 a}}, {{fact: echo.lvef, below: 40 %}}]}}
    other: {{all: [{{fact: {other}}}, {{fact: {third}}}]}}
    strength: weak
    tier: T3
    source: none
    seen: practice
    confidence: low
    mechanism: None.
"""


def rules(count: int, findings: list[str], prefix: str) -> str:
    """`count` rules spread over `findings`."""
    size = len(findings)
    return "rules:" + "".join(
        RULE.format(
            name=f"{prefix}-{number}", relation=RELATIONS[number % 4], finding=findings[number % size],
            other=findings[(number * 7 + 3) % size], third=findings[(number * 11 + 5) % size],
        )
        for number in range(count)
    )  # fmt: skip


def book(*texts: str) -> Rulebook:
    """A rulebook of the shipped vocabulary and some rules."""
    trees = {"vocabulary.yaml": shipped_trees()["vocabulary.yaml"]}
    for number, text in enumerate(texts):
        tree = parse(text, Faults())
        assert tree is not None
        trees[f"{number}.yaml"] = tree
    found, issues = build(trees, None)
    assert found is not None, issues
    return found


def rows() -> Iterator[Row]:
    """The measured rows."""
    today = exam()
    context = Context(MOMENT, (
        Fact("patient.age", State.PRESENT, Source.DEMOGRAPHICS),
        Fact("condition.hypertension", State.PRESENT, Source.PROBLEM_LIST),
    ))  # fmt: skip
    table = collect(today, context)
    recorded = {entry.finding for entry in today.entries}
    signs = [k.id for k in kinds().values() if k.kind == "sign"]
    mixed = sorted(recorded & set(signs)) * 2 + signs
    absent = [id_ for id_ in signs if id_ not in table.by_id]
    few, many = book(rules(200, mixed, "a")), book(rules(200, mixed, "a"), rules(1800, absent, "b"))
    touched = sum(len(g.steps) for f in table.by_id for g in few.program.groups.get(f, ()))
    shipped = load()
    times = interleaved(
        {
            "build": lambda: encode(today, form="f", recorded=MOMENT),
            "few": lambda: few.program.decide(View(table)),
            "many": lambda: many.program.decide(View(table)),
            "lay out": lambda: collect(today, context),
            "review": lambda: review(today, context, rules=shipped),
        }
    )
    yield at_most(f"deciding 200 rules ({touched} touched), 25 entries / building the Bundle",
                  ratio(times, "few", "build"), 0.4)  # fmt: skip
    yield at_most("2,000 rules, the further ones on absent findings / 200", ratio(times, "many", "few"), 1.1)
    yield at_most("laying entries and chart side by side / building", ratio(times, "lay out", "build"), 1.0)
    what = f"whole review by the {len(shipped.rules)} shipped rules, with grounds / building"
    yield at_most(what, ratio(times, "review", "build"), 25)
