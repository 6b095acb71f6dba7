"""What the reader hands back: findings tied to words, and the words that were not understood."""

from __future__ import annotations

from dataclasses import dataclass

from fhirgallop.exam.entry import Entry
from fhirgallop.outcome import Issue


@dataclass(frozen=True, slots=True)
class ReadFinding:
    """One finding and the words it was read from.

    Attributes:
        entry: finding, presence, answer or number, qualifiers.
        start: first character of its words in the line.
        end: character after its last word.
        rule: what decided its presence: `said`, `denied`, `denied-list`, `doubted`, `scope-doubtful`,
            `not-examined`, `answer`, `number`.
    """

    entry: Entry
    start: int
    end: int
    rule: str


@dataclass(frozen=True, slots=True)
class Unread:
    """Words that say nothing of today's examination, or that were not understood.

    Attributes:
        start: first character.
        end: character after the last one.
        why: `unknown`, `past`, `family`, `condition`, `patient`, or `doubtful`.
    """

    start: int
    end: int
    why: str = "unknown"


@dataclass(frozen=True, slots=True)
class ReadLine:
    """One line, read."""

    text: str
    findings: tuple[ReadFinding, ...]
    unread: tuple[Unread, ...]
    issues: tuple[Issue, ...]

    def words(self, part: ReadFinding | Unread) -> str:
        """The words of a part, as written."""
        return self.text[part.start : part.end]
