r"""Escape sequences against HL7 v2 chapter 2, section 2.7 ("Use of escape sequences in text fields").

The meanings below are those of the standard's table, written from memory of v2.5.1 and v2.8.2:
\F\ field, \S\ component, \T\ subcomponent, \R\ repetition, \E\ escape, \H\ and \N\ highlighting, \Xdd..\ hex,
\.sp<n>\ \.br\ \.fi\ \.nf\ \.in<n>\ \.ti<n>\ \.sk<n>\ \.ce\ formatting commands.
"""

from __future__ import annotations

import pytest

from fhirgallop.intake.hl7_syntax import Delimiters, escaped, unescaped


@pytest.mark.parametrize(
    ("written", "meant"),
    [
        (r"\F\ ", "| "), (r"\S\ ", "^ "), (r"\T\ ", "& "), (r"\R\ ", "~ "), (r"\E\ ", "\\ "),
        (r"\H\now\N\ plain", "now plain"),
        (r"\X0D\ ", "\n "), (r"\X0D0A\ ", "\n "), (r"\X416263\ ", "Abc "),
        (r"a\.br\b", "a\nb"), (r"a\.sp\b", "a\nb"), (r"a\.sp3\b", "a\n\n\nb"),
        (r"a\.sk4\b", "a    b"), (r"\.in+5\a", "a"), (r"\.ti-2\a", "a"), (r"\.fi\a\.nf\b", "ab"),
        (r"a\.ce\b", "a\nb"),
        (r"\E\F\E\ ", r"\F\ "),
    ],
)  # fmt: skip
def test_standard_sequences(written, meant):
    assert unescaped(written) == (meant, True)


def test_the_separators_are_those_of_the_message():
    marks = Delimiters("!", "*", "?", "/", "%")
    assert unescaped("/F//S//T//R//E/", marks) == ("!*%?/", True)


@pytest.mark.parametrize("text", ["a|b^c&d~e\\f", "\\", "\\F\\", "one\ntwo", "\\.br\\", ""])
def test_what_is_escaped_reads_back(text):
    assert unescaped(escaped(text)) == (text, True)


def test_a_huge_repeat_count_stays_small():
    assert len(unescaped(r"\.sp999\\.sk999\ ")[0]) < 100
    assert unescaped(r"\.sp9999\ ")[1] is False
