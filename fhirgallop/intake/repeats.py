"""Notices a record that comes twice in one batch."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable, Iterator
from dataclasses import replace

from fhirgallop.intake.limits import DEFAULT, Limits
from fhirgallop.intake.reading import Read, Rejected
from fhirgallop.intake.record import LocalRecord
from fhirgallop.outcome import Issue


def flag_repeats(stream: Iterable[Read], *, limits: Limits = DEFAULT) -> Iterator[Read]:
    """`stream`, with a warning on each record whose number or whole content came before.

    The last `limits.remembered` records are kept in mind, as digests only.
    """
    seen: dict[bytes, str] = {}
    for place, read in enumerate(stream, start=1):
        if isinstance(read, Rejected):
            yield read
            continue
        content, where = _content(read), _where(read, place)
        identifier = read.header.identifier and _digest(f"number\x1f{read.header.identifier}")
        issue = None
        if content in seen:
            issue = _repeated(read, "This record is the same as the one", seen[content], where)
        elif identifier and identifier in seen:
            issue = _repeated(
                read,
                "This record has the number of the one",
                seen[identifier],
                where,
                "; its content differs",
            )
        for key in (content, identifier):
            if key:
                seen.setdefault(key, where)
        while len(seen) > 2 * limits.remembered:
            del seen[next(iter(seen))]
        yield replace(read, issues=(*read.issues, issue)) if issue else read


def _repeated(read: LocalRecord, start: str, first: str, second: str, more: str = "") -> Issue:
    text = f"{start} at {first} (this is {second}){more}; send each examination once."
    return Issue("warning", "duplicate", "record-repeated", text, source=read.source, line=read.line)


def _where(read: LocalRecord, place: int) -> str:
    return f"line {read.line}" if read.line else f"place {place} of the batch"


def _content(read: LocalRecord) -> bytes:
    header = read.header
    parts = [header.patient, header.encounter, header.time, header.identifier, header.status]
    for field in read.fields.values():
        parts.append(field.name)
        parts += [f"{type(value).__name__}{value}" for value in field.values]
    return _digest("\x1f".join(parts))


def _digest(text: str) -> bytes:
    return hashlib.blake2b(text.encode("utf-8", "surrogatepass"), digest_size=16).digest()
