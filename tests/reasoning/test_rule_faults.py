"""A rule file is checked whole: every fault at once, each with its file and line."""

from __future__ import annotations

import pytest

from fhirgallop.reasoning.rulebook import COMPILED, check_text, compiled_text, load, shipped_texts, with_site

VOCABULARY = """\
windows:
  encounter: {within: 24 h, same-encounter: yes, beyond: unknown}
defaults: {everything-else: encounter}
families:
  one: {title: One, question: Listen again?}
"""
SUBJECT = "finding: heart-sound.s4"
OTHER = "{fact: rhythm.diagnosis, answer: [atrial-fibrillation]}"
JUDGED = "{judge: check.pulse-pressure, given: {systolic_mmhg: vital.bmi}, answer: [broken]}"
RULE = """\
rules:
  - id: x.first
    row: X-01
    relation: contradicts
    finding: heart-sound.s4
    other: {fact: rhythm.diagnosis, answer: [atrial-fibrillation]}
    strength: strong
    tier: T1
    family: one
    source: a source
    seen: memory
    confidence: high
    mechanism: Why it is so.
    wording: Unusual together; listen again?
"""


def faults(text: str, vocabulary: str = VOCABULARY) -> list[tuple[int, str]]:
    return [
        (issue.line, issue.rule)
        for issue in check_text({"a.yaml": vocabulary, "b.yaml": text})
        if issue.source
    ]


def changed(old: str, new: str, text: str = RULE) -> str:
    assert old in text
    return text.replace(old, new)


def test_a_sound_file_has_no_faults() -> None:
    assert faults(RULE) == []


@pytest.mark.parametrize(
    ("old", "new", "line", "rule"),
    [
        (SUBJECT, "finding: heart-sound.s44", 5, "rules-unknown-finding"),
        ("fact: rhythm.diagnosis", "fact: rhythm.diagnose", 6, "rules-unknown-finding"),
        ("[atrial-fibrillation]", "[atrial-fibrilation]", 6, "rules-unknown-answer"),
        ("answer: [atrial-fibrillation]", "at-least: 3 mm", 6, "rules-wrong-kind"),
        ("    source: a source\n", "", 2, "rules-missing-key"),
        ("    mechanism: Why it is so.\n", "", 2, "rules-missing-key"),
        ("    seen: memory\n", "    seen: rumour\n", 11, "rules-unknown-value"),
        ("    strength: strong\n", "    strength: weak\n", 8, "rules-tier"),
        ("    family: one\n", "    family: two\n", 9, "rules-unknown-family"),
        ("id: x.first", "id: First", 2, "rules-id"),
        ("    row: X-01\n", "", 2, "rules-missing-key"),
        ("listen again?", "this is an error", 14, "rules-wording"),
        ("Unusual together; listen again?", "These contradict each other", 14, "rules-wording"),
        ("    wording: Unusual together; listen again?\n", "", 2, "rules-missing-key"),
        ("relation: contradicts", "relation: contradict", 4, "rules-unknown-value"),
        ("    tier: T1\n", "    teir: T1\n", 8, "rules-unknown-key"),
        ("    family: one\n", "    family: one\n    yields-to: [x.second]\n", 2, "rules-unknown-rule"),
        ("    family: one\n", "    family: one\n    yields-to: [x.first]\n", 2, "rules-cycle"),
        (SUBJECT, "finding: {fact: heart-sound.s4, with: {valve: [mitral]}}", 5, "rules-unknown-property"),
        (SUBJECT, "finding: {fact: heart-sound.s4, with: {chamber: [lft]}}", 5, "rules-unknown-answer"),
        (SUBJECT, "finding: {fact: heart-sound.s4, window: forever}", 5, "rules-unknown-window"),
        (SUBJECT, "finding: {fact: heart-sound.s4, from: [gossip]}", 5, "rules-unknown-value"),
        (OTHER, "{use: nothing}", 6, "rules-unknown-condition"),
        (OTHER, "{all: []}", 6, "rules-condition"),
        (OTHER, "{count: 3, of: [{fact: murmur}]}", 6, "rules-unreachable"),
        (OTHER, "{fact: vital.heart-rate, above: 100 /min, below: 60 /min}", 6, "rules-unreachable"),
        (OTHER, "{fact: vital.heart-rate, above: 5000 /min}", 6, "rules-unreachable"),
        (OTHER, "{all: [{fact: murmur}, {fact: murmur, is: absent}]}", 6, "rules-unreachable"),
        (OTHER, "{fact: vital.heart-rate, above: 100 mm}", 6, "rules-threshold"),
        (OTHER, "{judge: check.pulse, given: {a: murmur}, answer: [x]}", 6, "rules-unknown-computation"),
        (OTHER, JUDGED, 6, "rules-unit"),
    ],
)  # fmt: skip
def test_each_fault_has_its_line(old: str, new: str, line: int, rule: str) -> None:
    assert (line, rule) in faults(changed(old, new))


def test_all_faults_come_at_once() -> None:
    text = changed("heart-sound.s4", "heart-sound.s5", changed("[atrial-fibrillation]", "[none]", RULE))
    found = faults(changed("    source: a source\n", "", text))
    assert [rule for _, rule in sorted(found)] == [
        "rules-missing-key", "rules-unknown-finding", "rules-unknown-answer",
    ]  # fmt: skip


def test_a_near_word_is_offered() -> None:
    texts = {"a.yaml": VOCABULARY, "b.yaml": changed("heart-sound.s4", "heart-sond.s4")}
    assert any("heart-sound.s4" in issue.text for issue in check_text(texts))


def test_the_same_id_twice_names_both_places() -> None:
    twice = check_text({"a.yaml": VOCABULARY, "b.yaml": RULE, "c.yaml": RULE})
    assert [(issue.source, issue.line, issue.rule) for issue in twice] == [
        ("c.yaml", 2, "rules-duplicate-id")
    ]
    assert "b.yaml line 2" in twice[0].text


def test_conditions_in_a_circle_are_refused() -> None:
    circle = "conditions:\n  one: {use: two}\n  two: {not: {use: one}}\n"
    assert (2, "rules-cycle") in faults(circle)


def test_an_urgent_rule_names_nothing_and_is_timed() -> None:
    urgent = changed("    tier: T1\n", "    tier: U\n")
    assert (2, "rules-urgent") in faults(urgent)
    urgent = changed("relation: contradicts", "relation: suggests", urgent)
    urgent = changed("    wording: Unusual together; listen again?\n", "", urgent)
    assert faults(urgent) == []
    weak = VOCABULARY.replace("beyond: unknown", "beyond: weaken")
    assert (2, "rules-urgent") in faults(urgent, weak)


def test_a_row_left_out_needs_its_reason() -> None:
    assert (2, "rules-missing-key") in faults("left-out:\n  X-07:\n")


@pytest.mark.parametrize(
    "text",
    [
        "rules: [",
        "rules: &a [*a]",
        "\x00",
        "rules: !!python/object x",
        "- - - -",
        "rules: {a: 1, a: 2}",
        "[" * 500,
    ],
)
def test_unreadable_text_is_a_fault_and_no_crash(text: str) -> None:
    issues = check_text({"a.yaml": text})
    assert issues
    assert all(issue.is_error for issue in issues)


def test_shipped_rules_are_sound_and_compiled() -> None:
    assert check_text(shipped_texts()) == []
    assert COMPILED.read_text(encoding="utf-8") == compiled_text(), "run python -m fhirgallop.reasoning"


def test_every_rule_says_how_its_source_was_seen() -> None:
    for rule in load().rules.values():
        assert rule.source, rule.id
        assert rule.seen in ("excerpt", "memory", "practice", "definition"), rule.id
        assert rule.mechanism.endswith("."), rule.id


def test_a_site_chooses_silences_retunes_and_adds() -> None:
    site = """\
silence: [s4.hypertension]
retune:
  s4.in-mitral-stenosis: {tier: T3, strength: weak}
choose:
  lvedp-raised: 15 mm[Hg]
  elderly-age: {value: 65 a, source: our own agreement}
rules:
  - id: site.thin-patients
    row: SITE-1
    relation: suggests
    finding: heart-sound.s3
    other: {fact: vital.bmi, below: 18 kg/m2}
    strength: weak
    tier: T3
    source: our own agreement
    seen: practice
    confidence: low
    mechanism: A thin chest lets more through.
"""
    book, issues = with_site(site, "site.yaml")
    assert issues == []
    assert book is not None
    assert "site.thin-patients" in book.rules
    assert book.silenced == {"s4.hypertension"}
    assert book.rules["s4.in-mitral-stenosis"].tier == "T3"
    assert (str(book.cutoffs["lvedp-raised"].value), book.cutoffs["lvedp-raised"].source) == (
        "15", "Marcus GM et al., JAMA 2005;293:2238 (above 15)",
    )  # fmt: skip
    assert book.cutoffs["elderly-age"].source == "our own agreement"
    assert load().rules["s4.in-mitral-stenosis"].tier == "T2", "ours stay as they are"
    assert book.version != load().version


@pytest.mark.parametrize(
    ("site", "line", "rule"),
    [
        ("silence: [s4.nothing]\n", 1, "rules-unknown-rule"),
        ("retune:\n  s4.in-mitral-stenosis: {tier: T1, strength: strong}\n", 2, "rules-retune"),
        ("retune:\n  s4.in-flutter: {tier: T2}\n", 2, "rules-retune"),
        ("retune:\n  s4.nothing: {tier: T3}\n", 2, "rules-unknown-rule"),
        ("choose:\n  lvedp-raised: 14 mm[Hg]\n", 2, "rules-choice"),
        ("choose:\n  nothing: 14 mm[Hg]\n", 2, "rules-choice"),
        ("muffle: [s4.in-flutter]\n", 1, "rules-unknown-key"),
    ],
)
def test_a_faulty_site_file_is_refused_whole(site: str, line: int, rule: str) -> None:
    book, issues = with_site(site, "site.yaml")
    assert book is None
    assert ("site.yaml", line, rule) in [(issue.source, issue.line, issue.rule) for issue in issues]


def test_an_empty_site_file_changes_nothing() -> None:
    book, issues = with_site("", "site.yaml")
    assert (book, issues) == (load(), [])
