"""What was noticed while a chart was read, bounded: nobody reads ten thousand lines of the same kind."""

from __future__ import annotations

from collections import Counter
from typing import Final

from fhirgallop.outcome import Issue, Severity, ordered

MAX_OF_ONE_RULE: Final = 50


class Log:
    """Issues so far. None of them carries anything a resource says, only where and what kind."""

    def __init__(self) -> None:
        self._issues: list[Issue] = []
        self._counts: Counter[str] = Counter()

    def add(self, severity: Severity, code: str, rule: str, text: str, place: str = "") -> None:
        """Notes one issue; beyond the first fifty of a rule they are only counted."""
        self._counts[rule] += 1
        if self._counts[rule] <= MAX_OF_ONE_RULE:
            self._issues.append(Issue(severity, code, rule, text, expression=place))

    def all(self) -> tuple[Issue, ...]:
        """Every issue, most severe first, with one line for each rule that was cut short."""
        more = [
            Issue(
                "information", "informational", rule, f"{count - MAX_OF_ONE_RULE} more like this were found."
            )
            for rule, count in self._counts.items()
            if count > MAX_OF_ONE_RULE
        ]
        return tuple(ordered([*self._issues, *more]))
