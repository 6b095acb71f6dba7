"""Finds examinations that come twice, whichever part or file they stand in, in flat memory.

Each part leaves rows of digests. At the end the rows are dealt
into buckets by their first bytes, and each bucket is gone through by itself.
"""

from __future__ import annotations

import hashlib
import shutil
import struct
from collections.abc import Iterator, Sequence
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from fhirgallop.exam.exam import Exam
from fhirgallop.intake.reading import Read
from fhirgallop.intake.record import LocalRecord

FOLDER: Final = "keys"
_BUCKETS: Final = "buckets"
_ROW: Final = struct.Struct(
    ">16s8sIQI"
)  # whose and which examination, its content, file, line, place in line
_A_BUCKET: Final = 20_000
_MOST_BUCKETS: Final = 256  # files open at the same time


@dataclass(frozen=True, slots=True)
class Repeat:
    """An examination that came before.

    Attributes:
        file: place of its file in the input.
        line: its line; 0 where unknown.
        first_file: file and
        first_line: line of the first time.
        same: the content is the same, too.
    """

    file: int
    line: int
    first_file: int
    first_line: int
    same: bool


class Keys:
    """The rows of one part."""

    def __init__(self, file: int) -> None:
        self._file = file
        self.rows: list[bytes] = []

    def add(self, exam: Exam, read: Read) -> None:
        """Takes in one examination."""
        row = _ROW.pack(which(exam), _content(read), self._file, read.line, len(self.rows))
        self.rows.append(row)

    def as_bytes(self) -> bytes:
        """All rows."""
        return b"".join(self.rows)


def which(exam: Exam) -> bytes:
    """Digest of what an examination is known by: patient, number, and the systems of both."""
    whose = repr((exam.patient.system, exam.patient.value, exam.identifier_system, exam.identifier))
    return hashlib.blake2b(whose.encode("utf-8", "replace"), digest_size=16).digest()


def _content(read: Read) -> bytes:
    values = [(f.name, f.values) for f in read.fields.values()] if isinstance(read, LocalRecord) else []
    return hashlib.blake2b(repr(values).encode("utf-8", "replace"), digest_size=8).digest()


def repeats(folder: Path) -> Iterator[Repeat]:
    """Every examination but the first of its number, bucket by bucket."""
    files = sorted((folder / FOLDER).glob("*")) if (folder / FOLDER).is_dir() else []
    rows = sum(file.stat().st_size for file in files) // _ROW.size
    count = min(_MOST_BUCKETS, rows // _A_BUCKET + 1)
    buckets = folder / _BUCKETS
    shutil.rmtree(buckets, ignore_errors=True)
    buckets.mkdir()
    try:
        _deal(files, [buckets / f"{number}" for number in range(count)])
        for number in range(count):
            yield from _in_bucket((buckets / f"{number}").read_bytes())
    finally:
        shutil.rmtree(buckets)


def _deal(files: Sequence[Path], buckets: Sequence[Path]) -> None:
    with ExitStack() as stack:
        open_ = [stack.enter_context(bucket.open("wb")) for bucket in buckets]
        for file in files:
            data = file.read_bytes()
            for start in range(0, len(data), _ROW.size):
                row = data[start : start + _ROW.size]
                open_[int.from_bytes(row[:4]) % len(open_)].write(row)


def _in_bucket(data: bytes) -> Iterator[Repeat]:
    first: dict[bytes, tuple[bytes, int, int]] = {}
    for exam, content, file, line, _ in sorted(_ROW.iter_unpack(data), key=lambda row: row[2:]):
        seen = first.get(exam)
        if seen is None:
            first[exam] = (content, file, line)
        else:
            yield Repeat(file, line, seen[1], seen[2], seen[0] == content)
