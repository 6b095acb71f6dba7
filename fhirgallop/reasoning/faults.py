"""Collects the faults of rule files, all of them, each with file, line and a cure."""

from __future__ import annotations

from collections.abc import Iterable
from difflib import get_close_matches
from typing import Final

from fhirgallop.outcome import Issue, Severity

_MAX_SUGGESTIONS: Final = 100


class Faults:
    """Faults found so far; `source` is the file being read."""

    def __init__(self, source: str = "") -> None:
        self.source = source
        self.issues: list[Issue] = []
        self._suggestions = 0

    def add(self, line: int, rule: str, text: str, *, source: str = "", severity: Severity = "error") -> None:
        """Notes one fault."""
        self.issues.append(Issue(severity, "structure", rule, text, source=source or self.source, line=line))

    def near(self, word: str, known: Iterable[str]) -> str:
        """A sentence that offers known words like `word`; empty when none is like it."""
        if self._suggestions >= _MAX_SUGGESTIONS:
            return ""
        self._suggestions += 1
        close = get_close_matches(word[:64], list(known), n=3, cutoff=0.6)
        return f" Did you mean {' or '.join(close)}?" if close else ""
