from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
from ruamel.yaml import YAML

from fhirgallop.phrases import ReadLine, reader

CASES = Path(__file__).parents[1] / "cases" / "phrases"


def _cases() -> Iterator[Any]:
    for file in sorted(CASES.glob("*.yaml")):
        for case in YAML(typ="safe").load(file.read_text(encoding="utf-8")):
            yield pytest.param(case, id=f"{file.stem}: {case['line']}")


def _in_order(found: str) -> str:
    """Qualifiers sorted, so that a case may name them in any order; numbers keep their unit."""
    parts = found.split(" ")
    said = [part for part in parts[1:] if "=" not in part]
    return " ".join([parts[0], *said, *sorted(part for part in parts[1:] if "=" in part)])


@pytest.mark.parametrize("case", list(_cases()))
def test_a_line_says_what_its_case_says(case: dict[str, Any], said: Callable[[ReadLine], list[str]]) -> None:
    read = reader(case.get("language", "en")).read(case["line"])
    assert said(read) == sorted(_in_order(one) for one in case["found"])
    assert [read.words(one) for one in read.unread] == case.get("rest", [])
    if "words" in case:
        assert [read.words(one) for one in read.findings] == case["words"]


def test_there_are_three_hundred_lines() -> None:
    assert len(list(_cases())) >= 300
