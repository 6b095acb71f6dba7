"""What a reader hands back: records, and the issues of what could not become one."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace

from fhirgallop.intake.record import LocalRecord
from fhirgallop.outcome import Issue, Severity


@dataclass(frozen=True, slots=True)
class Rejected:
    """A part of a file that gave no record: where it stands, and why.

    Attributes:
        line: line or row in the source, from 1; 0 when unknown.
        issues: at least one; when none is an error, they are remarks on a file without records.
        source: file name.
    """

    line: int
    issues: tuple[Issue, ...]
    source: str = ""


Read = LocalRecord | Rejected


def refused(source: str, line: int, severity: Severity, rule: str, text: str) -> Rejected:
    """A part of a file that is refused for one reason."""
    code = "too-long" if "too-" in rule else "structure"
    return Rejected(line, (Issue(severity, code, rule, text, source=source, line=line),), source)


@dataclass(frozen=True, slots=True)
class Reading:
    """What one text held.

    Attributes:
        records: the examinations, in order; each carries the issues that are its own.
        issues: issues that belong to no record that came out.
    """

    records: tuple[LocalRecord, ...] = ()
    issues: tuple[Issue, ...] = ()

    def stream(self, source: str = "") -> Iterator[Read]:
        """The same as a stream: what was refused first, then the records."""
        if any(issue.is_error for issue in self.issues) or not self.records:
            if self.issues:
                yield Rejected(min((i.line for i in self.issues), default=0), self.issues, source)
            yield from self.records
        else:
            yield from remarked(self.issues, self.records, source)


def remarked(remarks: Iterable[Issue], stream: Iterable[Read], source: str = "") -> Iterator[Read]:
    """`stream`, with remarks on the whole file put on the first record that comes out of it."""
    pending = tuple(remarks)
    for read in stream:
        if pending and isinstance(read, LocalRecord):
            yield replace(read, issues=(*pending, *read.issues))
            pending = ()
        else:
            yield read
    if pending:
        yield Rejected(pending[0].line, pending, source)
