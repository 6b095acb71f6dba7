"""CSV against the seven definitions of RFC 4180 section 2 and their examples ("aaa,bbb,ccc")."""

from __future__ import annotations

import csv
import io

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fhirgallop.intake.table import read_csv

HEADER = "one,two,three\r\n"


def rows(text):
    return [
        [f.values[0] if f.values else "" for f in r.fields.values()]
        for r in read_csv(io.BytesIO(text.encode()))
    ]


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("aaa,bbb,ccc\r\nzzz,yyy,xxx\r\n", [["aaa", "bbb", "ccc"], ["zzz", "yyy", "xxx"]]),  # 1
        ("aaa,bbb,ccc\r\nzzz,yyy,xxx", [["aaa", "bbb", "ccc"], ["zzz", "yyy", "xxx"]]),  # 2
        ('"aaa","bbb","ccc"\r\nzzz,yyy,xxx', [["aaa", "bbb", "ccc"], ["zzz", "yyy", "xxx"]]),  # 5
        ('"aaa","b\r\nbb","ccc"\r\nzzz,yyy,xxx', [["aaa", "b\r\nbb", "ccc"], ["zzz", "yyy", "xxx"]]),  # 6
        ('"aaa","b""bb","ccc"', [["aaa", 'b"bb', "ccc"]]),  # 7
        ("aaa, b ,ccc", [["aaa", " b ", "ccc"]]),  # 4: spaces are part of a field
    ],
)
def test_the_examples_of_the_standard(text, expected):
    assert rows(HEADER + text) == expected


cells = st.text(st.characters(exclude_categories=["Cs"], exclude_characters="\0"), max_size=12).filter(
    lambda text: not text or not text.isspace()
)


@given(st.lists(st.tuples(cells, cells, cells).filter(any), min_size=1, max_size=5))
def test_what_the_standard_library_writes_reads_back(table):
    made = io.StringIO(newline="")
    csv.writer(made).writerows([["one", "two", "three"], *table])
    assert rows(made.getvalue()) == [list(row) for row in table]
