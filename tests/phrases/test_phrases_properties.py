from __future__ import annotations

import random
from collections.abc import Callable

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fhirgallop.exam.presence import Presence
from fhirgallop.phrases import MAX_CHARACTERS, ReadLine, reader

FINDINGS = (
    "S3", "S4", "pericardial rub", "opening snap", "systolic murmur", "diastolic murmur", "carotid bruit",
    "thrill", "parasternal heave", "pulsus alternans", "HJR", "JVD", "edema", "clubbing", "crackles",
    "ascites", "gallop",
)  # fmt: skip
CLAUSES = (
    "no S3", "S4 present", "3/6 holosystolic murmur at apex -> axilla", "loud P2", "JVP 8 cm", "BP 138/82",
    "no carotid bruits", "?opening snap", "clubbing not assessed", "h/o AF", "HR 76", "possible thrill",
    "father had ascites", "edema to the knees", "purple elephants",
)  # fmt: skip
WORDS = st.sampled_from(
    (
        "no", "S3", "S4", "murmur", "or", "and", ",", ";", ".", "/", "3/6", "III/VI", "at", "apex",
        "->", "axilla",
        "?", "not", "heard", "present", "absent", "JVP", "8", "cm", "BP", "138/82", "h/o", "father",
        "if", "but",
        "normal", "S1", "loud", "louder", "with", "Valsalva", "today", "-", "+", "(", ")", "systolic",
        "m/r/g",
        "due to", "unable to assess", "grade", "except", "zebra", "S1-L5", "'", "no-", "%", "<", ":", "\n",
    )
)  # fmt: skip
LINES = st.one_of(
    st.text(max_size=80), st.lists(WORDS, max_size=25).map(" ".join), st.lists(WORDS).map("".join)
)


@given(LINES)
@settings(max_examples=400, deadline=None)
def test_any_line_is_read_and_every_span_lies_in_it(text: str) -> None:
    for language in ("en", "de", "fr"):
        read = reader(language).read(text)
        assert read.text == text
        for part in (*read.findings, *read.unread):
            assert 0 <= part.start < part.end <= len(text)
            words = read.words(part)
            assert words == words.strip()
        for finding in read.findings:
            assert finding.entry.finding
            assert finding.entry.presence is not Presence.ABSENT or not finding.entry.answers


@given(st.lists(st.sampled_from(CLAUSES), min_size=1, max_size=6, unique=True), st.randoms())
@settings(max_examples=150, deadline=None)
def test_the_order_of_clauses_does_not_matter(clauses: list[str], chance: random.Random) -> None:
    shuffled = list(clauses)
    chance.shuffle(shuffled)
    one, other = (reader().read("; ".join(some)) for some in (clauses, shuffled))
    assert {f.entry for f in one.findings} == {f.entry for f in other.findings}
    assert sorted(one.words(u) for u in one.unread) == sorted(other.words(u) for u in other.unread)


@pytest.mark.parametrize("name", FINDINGS)
def test_no_before_a_single_finding_turns_present_to_absent_and_nothing_else(name: str) -> None:
    plain, denied = reader().read(name), reader().read(f"no {name}")
    assert [f.entry.presence for f in plain.findings] == [Presence.PRESENT]
    assert [f.entry.presence for f in denied.findings] == [Presence.ABSENT]
    for one, other in zip(plain.findings, denied.findings, strict=True):
        assert (one.entry.finding, one.entry.qualifiers) == (other.entry.finding, other.entry.qualifiers)
    assert not plain.unread
    assert not denied.unread


@pytest.mark.parametrize("doubt", ["possible {}", "?{}", "{}?", "cannot exclude {}", "{} cannot be excluded"])
@pytest.mark.parametrize("name", FINDINGS)
def test_doubt_is_neither_present_nor_absent(name: str, doubt: str) -> None:
    read = reader().read(doubt.format(name))
    assert [f.entry.presence for f in read.findings] == [Presence.UNCERTAIN]


@pytest.mark.parametrize(
    "form", ["h/o {}", "father had {}", "if {} call back", "history of {} in 1990", "denies {}"]
)
@pytest.mark.parametrize("name", FINDINGS)
def test_what_is_not_of_this_patient_today_is_no_finding(name: str, form: str) -> None:
    line = form.format(name)
    read = reader().read(line)
    assert read.findings == ()
    assert [read.words(one) for one in read.unread] == [line]


def test_a_text_that_is_too_long_is_refused_whole() -> None:
    text = "S" * (MAX_CHARACTERS + 1)
    read = reader().read(text)
    assert read.findings == ()
    assert [issue.rule for issue in read.issues] == ["phrase-too-long"]
    assert (read.unread[0].start, read.unread[0].end) == (0, len(text))


def test_a_long_line_gives_what_its_parts_give(said: Callable[[ReadLine], list[str]]) -> None:
    read = reader().read("no S3; 2/6 systolic murmur at LSB; " * 500)
    assert set(said(read)) == {
        "heart-sound.s3 absent", "murmur.systolic present grade=2/6 site=left-sternal-border",
    }  # fmt: skip
    assert len(read.findings) == 1000


@pytest.mark.parametrize("line", ["no S3, S4", "no harsh murmur", "S1 not loud", "HR 760", "JVP 8", "click"])
def test_every_doubt_is_told_without_the_words_of_the_record(line: str) -> None:
    issues = reader().read(line).issues
    assert issues
    for issue in issues:
        assert issue.rule.startswith("phrase-")
        assert "760" not in issue.text


def test_a_contradiction_in_one_line_is_an_error() -> None:
    read = reader().read("S3 present. No S3.")
    assert [(i.severity, i.rule) for i in read.issues] == [("error", "phrase-contradiction")]


PAIRS = (
    ("no {}, {} present", "absent", "present"),
    ("no {} but {}", "absent", "present"),
    ("{} but no {}", "present", "absent"),
    ("{}, no {}", "present", "absent"),
    ("{} no {}", "present", "absent"),
    ("no {} or {}", "absent", "absent"),
    ("no {}/{}", "absent", "absent"),
    ("neither {} nor {}", "absent", "absent"),
    ("{} and {} absent", "absent", "absent"),
    ("{} or {} not heard", "absent", "absent"),
    ("no {}; {}", "absent", "present"),
    ("No {}. {} heard.", "absent", "present"),
    ("{} absent, {} present", "absent", "present"),
    ("{}: yes, {}: no", "present", "absent"),
    ("{} +, {} -", "present", "absent"),
    ("{} and {}", "present", "present"),
    ("{} with {}", "present", "present"),
    ("no {}, {}", "absent", "uncertain"),
    ("{} or {}", "uncertain", "uncertain"),
    ("possible {} or {}", "uncertain", "uncertain"),
    ("possible {}, no {}", "uncertain", "absent"),
    ("{}? {}", "uncertain", "present"),
    ("{} absent {} present", "absent", "present"),
    ("no {} (but {})", "absent", "present"),
    ("{} not heard but {} heard", "absent", "present"),
)


@pytest.mark.parametrize(("form", "first", "second"), PAIRS)
def test_two_findings_in_one_line_keep_their_polarity(form: str, first: str, second: str) -> None:
    for one in FINDINGS:
        for other in FINDINGS:
            if one == other:
                continue
            line = form.format(one, other)
            found = [str(f.entry.presence) for f in reader().read(line).findings]
            assert found == [first, second], line
