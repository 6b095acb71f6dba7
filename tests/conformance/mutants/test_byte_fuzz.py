"""Byte fuzzing of `validate`: mutated texts of valid resources, guided by the lines of the judge they reach.

Short runs with a fixed seed, so that a failure can be had again; `ROUNDS` may be raised for a long one.
"""

from __future__ import annotations

import json
import random
import sys
from collections.abc import Callable
from types import FrameType
from typing import Any

import pytest
from hypothesis import given, settings, target
from hypothesis import strategies as st

from fhirgallop.conformance import validate
from fhirgallop.conformance.registry import registry
from fhirgallop.conformance.source import read
from fhirgallop.conformance.validator import thorough

ROUNDS = 150
SEEDS = ("observation", "patient", "transaction", "contained", "structure", "questionnaire", "values")
TOKENS = (
    *(b"null", b"[]", b"{}", b'""', b"[", b"]", b"{", b"}", b",", b":", b'"', b"true", b"1e999", b"-0"),
    *(b"\\u0000", b"\\ud800", b"\xff", b"\xef\xbb\xbf", b"\x00", b"#", b"/_history/1", b"urn:uuid:"),
    *(b"2024-02-30", b"T24:00:00Z", b"&nbsp;", b"<!DOCTYPE x>", b"<script/>", b'"_id":', b'"id":"#",'),
    *(b'"extension":[{}],', b'"contained":[{}],', b'"resourceType":"Bundle",', b'"reference":"#",'),
    *(b'"url":"x",', b'"valueCode":"a",'),
)  # fmt: skip


def _judged(text: bytes, edition: str) -> int:
    """Judges a text, in both passes and forms, which must give the same; the number of rules met."""
    issues = validate(text, edition)
    assert thorough(read(text), registry(edition)) == issues
    try:
        decoded = text.decode()
    except UnicodeDecodeError:
        assert issues
    else:
        assert validate(decoded, edition) == issues
    return len({issue.rule for issue in issues})


def _mutated(text: bytes, dice: random.Random, corpus: list[bytes]) -> bytes:
    data = bytearray(text)
    for _ in range(dice.choice((1, 1, 1, 2, 4))):
        at = dice.randrange(len(data) + 1)
        to = min(len(data), at + dice.choice((0, 1, 1, 4, 16, 64)))
        kind = dice.randrange(6)
        if kind == 0:
            data[at:to] = dice.choice(TOKENS)
        elif kind == 1:
            del data[at:to]
        elif kind == 2:
            data[at:at] = data[at:to]
        elif kind == 3 and at < len(data):
            data[at] = dice.randrange(256)
        elif kind == 4:
            other = dice.choice(corpus)
            start = dice.randrange(len(other) + 1)
            data[at:to] = other[start : start + dice.choice((8, 32, 128))]
        else:
            quotes = [i for i, byte in enumerate(data) if byte == ord('"')] or [0]
            place = dice.choice(quotes) + dice.choice((0, 1))
            data[place:place] = dice.choice((b"x", b"_", b"[x]", b"\\", b'"'))
    return bytes(data)


def _lines(run: Callable[[], object]) -> set[tuple[str, int]]:
    """The lines of the judge that a call reaches."""
    met: set[tuple[str, int]] = set()

    def of_line(frame: FrameType, event: str, arg: object) -> Any:
        met.add((frame.f_code.co_filename, frame.f_lineno))
        return of_line

    def of_call(frame: FrameType, event: str, arg: object) -> Any:
        return of_line if "conformance" in frame.f_code.co_filename else None

    before = sys.gettrace()
    sys.settrace(of_call)
    try:
        run()
    finally:
        sys.settrace(before)
    return met


@pytest.mark.parametrize("edition", ["R4", "R5"])
def test_bytes_that_reach_new_lines_are_mutated_on(
    edition: str, every_base: dict[tuple[str, str], Any]
) -> None:
    dice = random.Random(f"gallop-{edition}")
    corpus = [json.dumps(every_base[name, edition]).encode() for name in SEEDS]
    reached: set[tuple[str, int]] = set()
    for text in corpus:
        reached |= _lines(lambda text=text: validate(text, edition))
    at_first = len(reached)
    for _ in range(ROUNDS):
        text = _mutated(dice.choice(corpus), dice, corpus)
        new = _lines(lambda text=text: validate(text, edition)) - reached
        _judged(text, edition)
        if new:
            reached |= new
            corpus.append(text)
    assert len(reached) > at_first
    assert len(corpus) > len(SEEDS)


@given(
    st.sampled_from(SEEDS),
    st.lists(
        st.tuples(st.integers(0, 5000), st.integers(0, 40), st.binary(max_size=6) | st.sampled_from(TOKENS)),
        min_size=1,
        max_size=4,
    ),
    st.sampled_from(["R4", "R4B", "R5"]),
)
@settings(max_examples=150, deadline=None)
def test_any_edit_of_the_bytes_is_judged(
    every_base: dict[tuple[str, str], Any], name: str, edits: list[tuple[int, int, bytes]], edition: str
) -> None:
    text = json.dumps(every_base[name, edition]).encode()
    for at, size, put in edits:
        place = at % (len(text) + 1)
        text = text[:place] + put + text[place + size :]
    target(float(_judged(text, edition)), label="rules met")
