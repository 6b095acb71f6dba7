"""The catalogue files as plain rows, read without the package's own reader."""

from __future__ import annotations

import csv
from collections.abc import Callable
from pathlib import Path

import pytest

Rows = list[dict[str, str]]


@pytest.fixture(scope="session")
def rows(root: Path) -> Callable[[str], Rows]:
    def read(name: str) -> Rows:
        with (root / "terminology" / name).open(encoding="utf-8", newline="") as file:
            reader = csv.DictReader(file, strict=True)
            found = list(reader)
        assert all(None not in row and None not in row.values() for row in found), f"{name}: ragged row"
        return found

    return read


@pytest.fixture(scope="session")
def findings(rows: Callable[[str], Rows]) -> Rows:
    return rows("findings.csv")


@pytest.fixture(scope="session")
def qualifiers(rows: Callable[[str], Rows]) -> Rows:
    return rows("qualifiers.csv")


@pytest.fixture(scope="session")
def evidence(shared: Path) -> Callable[[str], Rows]:
    def read(name: str) -> Rows:
        with (shared / "evidence" / name).open(encoding="utf-8", newline="") as file:
            return list(csv.DictReader(file, delimiter="\t"))

    return read
