"""Properties: no record and no map text ever raises; nothing is dropped in silence; order does not matter."""

from __future__ import annotations

import random
from dataclasses import replace
from decimal import Decimal
from functools import cache
from pathlib import Path

from hypothesis import example, given, settings
from hypothesis import strategies as st

from fhirgallop.exam.catalogue import load
from fhirgallop.exam.checks import check
from fhirgallop.intake.record import Amount, Coded, Field, Header, LocalRecord, Span
from fhirgallop.mapping.apply import CompiledMap, apply
from fhirgallop.mapping.reading import load_map, read_map
from fhirgallop.mapping.template_map import TemplateMap

MAPS = sorted((Path(__file__).parents[2] / "examples" / "informatician").glob("*.yaml"))


@cache
def maps() -> tuple[TemplateMap, ...]:
    return tuple(load_map(path) for path in MAPS)


@cache
def known_words(template: TemplateMap) -> list[str]:
    words = {
        "",
        " ",
        "nan",
        "-",
        "152/84",
        "36,8",
        "2-3/6",
        "VII/VI",
        "60-65 %",
        "172 cm",
        "14.03.2026",
        "09:30",
    }
    for line in template.lines:
        for choice in (line.choice, line.named, *(source.choice for source in line.qualifiers)):
            words |= set(choice.meanings if choice else ())
    return sorted(words)


texts = st.text(max_size=30)
numbers = st.decimals(allow_nan=True, allow_infinity=True) | st.builds(
    lambda digits, power: Decimal(digits).scaleb(power),
    st.integers(-(10**9), 10**9),
    st.integers(-5000, 5000),
)
units = st.sampled_from(["", "mm[Hg]", "mmHg", "kPa", "%", "cm", "foo", "[degF]"])


def values(words: list[str]):
    return st.one_of(
        st.sampled_from(words),
        texts,
        numbers,
        st.booleans(),
        st.builds(Coded, st.sampled_from(words) | texts, texts),
        st.builds(Amount, numbers, units, st.sampled_from(["", "<", ">=", "?"])),
        st.builds(Span, st.none() | numbers, st.none() | numbers, units),
    )


def fields(template: TemplateMap, name: str):
    marks = st.sampled_from(
        [
            "",
            "",
            "",
            "",
            "final",
            "preliminary",
            "amended",
            "corrected",
            "entered-in-error",
            "cancelled",
            "not-asked",
        ]
    )
    return st.builds(
        Field,
        st.just(name),
        st.lists(values(known_words(template)), max_size=3).map(tuple),
        st.integers(0, 9),
        marks,
        st.sampled_from(["", "", "", "2026-03-14T09:30:00+01:00", "2026-03-14T09:30", "soon"]),
        st.lists(texts, max_size=2).map(tuple),
        st.sampled_from(["", "", "bell"]),
    )


@st.composite
def records(draw, template: TemplateMap):
    reads = sorted(template.reads())
    names = draw(st.lists(st.sampled_from(reads) | texts.filter(bool), max_size=25, unique=True))
    header = draw(
        st.builds(Header, texts, texts, texts, texts, texts, st.sampled_from(["", "final", "cancelled"]))
    )
    form = draw(st.sampled_from(["json", "table", "oru", "questionnaire-response"]))
    return LocalRecord(form, {name: draw(fields(template, name)) for name in names}, header)


@st.composite
def cases(draw):
    template = draw(st.sampled_from(maps()))
    return template, draw(records(template))


@settings(deadline=None)
@given(cases())
def test_no_record_raises_and_checks_run_over_what_came_out(case):
    template, record = case
    mapped = apply(record, template, load())
    if mapped.exam:
        check(mapped.exam, load())
    known = load()
    for entry in mapped.exam.entries if mapped.exam else ():
        definition = known.findings[entry.finding]
        assert set(entry.answers) <= set(known.answers(definition))
        assert {q.axis for q in entry.qualifiers} <= definition.qualifiers
        assert entry.measure is None or entry.measure.unit == definition.unit


@settings(deadline=None)
@given(cases())
def test_every_field_is_read_or_ignored_or_reported(case):
    template, record = case
    mapped = apply(record, template, load())
    ready = CompiledMap(template, load())
    reported = {issue.field for issue in mapped.issues}
    used = {name for entry in mapped.exam.entries for name in entry.fields} if mapped.exam else set()
    for name in record.fields:
        if name in ready.reads or ready.ignores(name):
            continue
        assert name in mapped.unread
        assert name[:200] in reported
    assert set(mapped.unread) <= record.fields.keys()
    # A filled box that only one line can read, for its value, went into an entry or into an issue.
    once = [line for line in template.lines if line.number and not line.number.split and not line.choice]
    for line in once:
        field = record.fields.get(line.field)
        if mapped.exam and field and ready.blanks.filled(field):
            assert line.field in used | reported


@settings(deadline=None)
@given(cases(), st.randoms(use_true_random=False))
def test_the_order_of_lines_does_not_matter_to_the_issues(case, shuffle: random.Random):
    template, record = case
    lines = list(template.lines)
    shuffle.shuffle(lines)
    other = replace(template, lines=tuple(lines))
    one, two = apply(record, template, load()), CompiledMap(other, load()).apply(record)
    assert set(one.issues) == set(two.issues)
    assert set(one.unread) == set(two.unread)
    if one.exam and two.exam:
        assert {entry.key for entry in one.exam.entries} == {entry.key for entry in two.exam.entries}


@settings(deadline=None)
@given(st.text(max_size=400) | st.binary(max_size=400))
@example("name: \x00")
@example("? [a, b]\n: c")
@example("%YAML 9.9\n---\na: 1")
@example("a: !<tag:x> b")
@example("- - - - - - - - - - - - - - - - - - - a")
@example("a: |2\n x")
@example('a: "\\ud800"')
def test_no_text_raises(text):
    template, issues = read_map(text)
    assert template is None
    assert issues


@settings(max_examples=60, deadline=None)
@given(st.data())
def test_a_damaged_map_never_raises(data):
    text = data.draw(st.sampled_from([path.read_text("utf-8") for path in MAPS]))
    lines = text.split("\n")
    at = data.draw(st.integers(0, len(lines) - 1))
    damage = data.draw(
        st.sampled_from(["", "  ", "- ", "x: [", "}", ": :", "\t", "lines: 3", "'", '"', "? a", "zz: {}"])
    )
    cut = data.draw(st.integers(0, len(lines[at])))
    lines[at] = lines[at][:cut] + damage + lines[at][data.draw(st.integers(cut, len(lines[at]))) :]
    template, issues = read_map("\n".join(lines))
    assert (template is None) == any(issue.is_error for issue in issues)
    assert all(issue.line >= 0 and issue.text for issue in issues)
