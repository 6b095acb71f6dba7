"""Collects the faults of a map, all of them, each with its line and a cure."""

from __future__ import annotations

from collections.abc import Iterable
from difflib import get_close_matches
from typing import Final

from fhirgallop.exam.catalogue import Catalogue
from fhirgallop.outcome import Issue, Severity

# Looking for near words costs milliseconds; a map of thousands of faults gets no more of them.
_MAX_SUGGESTIONS: Final = 200
_MAX_WORD: Final = 64


class Faults:
    """Faults found so far in the map called `source`."""

    def __init__(self, source: str) -> None:
        self.issues: list[Issue] = []
        self._source = source
        self._suggestions = 0

    def add(
        self,
        line: int,
        rule: str,
        text: str,
        *,
        code: str = "structure",
        column: int = 0,
        severity: Severity = "error",
    ) -> None:
        """Notes one fault."""
        self.issues.append(Issue(severity, code, rule, text, source=self._source, line=line, column=column))

    def near(self, word: str, known: Iterable[str], *, count: int = 3) -> str:
        """A sentence that offers up to `count` known words like `word`; empty when none is like it."""
        return _offer(self._closest(word, known, count))

    def near_finding(self, word: str, catalogue: Catalogue) -> str:
        """The same for finding ids, also found by label, by their last part, and by clinicians' wordings."""
        if self._suggestions >= _MAX_SUGGESTIONS:
            return ""
        wordings: dict[str, list[str]] = {}
        for finding in catalogue.findings.values():
            for wording in (finding.id, finding.label, finding.id.rpartition(".")[2]):
                wordings.setdefault(wording.casefold(), []).append(finding.id)
        for synonym in catalogue.synonyms:
            if synonym.id in catalogue.findings:
                wordings.setdefault(synonym.wording.casefold(), []).append(synonym.id)
        close = self._closest(word.casefold(), wordings, 4)
        return _offer(list(dict.fromkeys(id_ for wording in close for id_ in wordings[wording]))[:3])

    def _closest(self, word: str, known: Iterable[str], count: int) -> list[str]:
        if self._suggestions >= _MAX_SUGGESTIONS:
            return []
        self._suggestions += 1
        return get_close_matches(word[:_MAX_WORD], list(known), n=count, cutoff=0.6)


def _offer(words: list[str]) -> str:
    if not words:
        return ""
    *most, last = words
    return f" Did you mean {', '.join(most) + ' or ' if most else ''}{last}?"
