"""Codes parts of a file in a worker process: each part written whole, then entered in the journal."""

from __future__ import annotations

import gzip
import io
import zlib
from collections.abc import Callable, Generator, Iterator
from contextlib import ExitStack, closing
from dataclasses import dataclass
from itertools import chain, islice, pairwise
from pathlib import Path
from typing import Any, BinaryIO, Final, cast

from fhirgallop.bulk.coding import Coded, code, template_of
from fhirgallop.bulk.findings import FINDINGS, rows_of, write
from fhirgallop.bulk.folder import Entry, Folder, LineFiles, part_name, whole
from fhirgallop.bulk.repeats import FOLDER as KEYS
from fhirgallop.bulk.repeats import Keys, which
from fhirgallop.bulk.tally import Tally
from fhirgallop.bulk.wish import LIMITS, Source, Wish
from fhirgallop.exam.context import Context
from fhirgallop.intake.cutting import cuts
from fhirgallop.intake.detect import BY_CONTENT_TYPE, open_records
from fhirgallop.intake.midway import START, Midway
from fhirgallop.intake.reading import Read, refused
from fhirgallop.reasoning.review import review

_SAY_EACH: Final = 50


@dataclass(frozen=True, slots=True)
class Job:
    """A part of a file, or all parts of a file that can be read from its start only.

    Attributes:
        source: the file.
        file: its place in the input.
        part: the part's place in the file; 0 for all.
        start: where the part begins.
        end: bytes at which it ends; the end of the file when None.
        last: no part comes after it.
    """

    source: Source
    file: int
    part: int = 0
    start: Midway = START
    end: int | None = None
    last: bool = True

    @property
    def in_parts(self) -> bool:
        """Whether this is one part among others; else all of a file, read from its start."""
        return self.source.in_parts

    @property
    def size(self) -> int:
        """Bytes of the file that it reads."""
        return (self.source.size if self.end is None else self.end) - self.start.offset


class Range(io.RawIOBase):
    """The bytes of a file that a job is about."""

    def __init__(self, file: BinaryIO, job: Job) -> None:
        super().__init__()
        file.seek(job.start.offset)
        self._file = file
        self._left = None if job.end is None else job.end - job.start.offset

    def read(self, size: int = -1) -> bytes:
        """The next `size` bytes at most."""
        if self._left is None:
            return self._file.read(size)
        data = self._file.read(min(size, self._left) if size >= 0 else self._left)
        self._left -= len(data)
        return data


def jobs_of(file: int, source: Source, wish: Wish) -> Iterator[Job]:
    """The jobs of one file, in order; found while the file is read through.

    Raises:
        OSError: the file cannot be read.
    """
    if not source.in_parts:
        yield Job(source, file)
        return
    with source.path.open("rb") as stream:
        places = chain([START], cuts(stream, source.kind, wish.each, LIMITS), [None])
        for part, (start, end) in enumerate(pairwise(places)):
            if start is not None:
                yield Job(source, file, part, start, end.offset if end else None, end is None)


def reads_of(job: Job) -> Generator[Read, None, None]:
    """The records of a job.

    Raises:
        OSError: the file cannot be read.
    """
    source, line = job.source, job.start.line
    kind = next(name for name, kind in BY_CONTENT_TYPE.items() if kind == source.kind)
    name = str(source.path)
    with source.path.open("rb") as file:
        stream = cast("BinaryIO", gzip.GzipFile(fileobj=file) if source.packed else Range(file, job))
        try:
            for read in open_records(stream, content_type=kind, name=name, limits=LIMITS, since=job.start):
                line = read.line
                yield read
        except (EOFError, gzip.BadGzipFile, zlib.error):
            text = (
                "The compressed file is broken from here on; pack it again, or send what follows by itself."
            )
            yield refused(name, line, "fatal", "gzip-broken", text)


class Worker:
    """Codes jobs; made once in each process."""

    def __init__(self, wish: Wish, folder: Path, say: Callable[[int], None]) -> None:
        self._wish = wish
        self._folder = Folder(folder)
        self._template = template_of(wish)
        self._say = say

    def do(self, job: Job) -> None:
        """Writes every part of a job that is not done yet.

        Raises:
            OSError: a file cannot be read or written; what was begun is not there.
        """
        with closing(reads_of(job)) as reads:
            if job.in_parts:
                self._part(job, job.part, reads, lambda: job.last)
            else:
                self._all_parts(job, reads)

    def _all_parts(self, job: Job, reads: Iterator[Read]) -> None:
        """Part after part of what can be read from its start only; what is done is passed over."""
        part = 0
        while self._folder.is_done(part_name(job.file, part)):
            part += 1
        if part and self._folder.entry(part_name(job.file, part - 1)).last:
            return
        for _ in islice(reads, part * self._wish.each):
            pass
        chunk = _Chunk(reads, self._wish.each)
        while True:
            self._part(job, part, iter(chunk), lambda: chunk.next is None)
            part += 1
            if chunk.next is None:
                return

    def _part(self, job: Job, part: int, reads: Iterator[Read], is_last: Callable[[], bool]) -> None:
        name = part_name(job.file, part)
        tally, keys, findings = Tally(), Keys(job.file), list[dict[str, Any]]()
        with ExitStack() as stack:
            files = LineFiles(self._folder, name, stack, packed=self._wish.packed)
            said = 0
            for said, read in enumerate(reads, 1):
                coded = code(read, self._template, self._wish)
                for kind, text in coded.written():
                    files.add(kind, text)
                count(coded, tally, self._wish)
                if coded.exam:
                    keys.add(coded.exam, read)
                    if self._wish.findings:
                        findings += rows_of(coded.exam)
                if said % _SAY_EACH == 0:
                    self._say(_SAY_EACH)
            self._say(said % _SAY_EACH)
            if keys.rows:
                place = self._folder.path / KEYS
                place.mkdir(exist_ok=True)
                stack.enter_context(whole(place / name)).write(keys.as_bytes())
            written = files.written()
            if findings:
                place = self._folder.path / FINDINGS
                place.mkdir(exist_ok=True)
                write(findings, stack.enter_context(whole(place / f"{name}.parquet")))
                written = (*written, (FINDINGS, f"{name}.parquet", len(findings)))
        self._folder.commit(name, Entry(written, tally.as_dict(), is_last()))


def count(coded: Coded, tally: Tally, wish: Wish) -> None:
    """Counts a record, and of one examination in so many what the rules say, its chart not being at hand.

    Which ones is told by a digest, so that they are the same ones whatever the parts are.
    """
    tally.add(coded, wordings=wish.wordings)
    exam = coded.exam
    if exam and wish.review_each and int.from_bytes(which(exam)[:8]) % wish.review_each == 0:
        tally.add_review(review(exam, Context(wish.recorded, patient=exam.patient)))


class _Chunk:
    """The next so many of a stream's records, each time it is gone through; `next` is the one after them."""

    def __init__(self, reads: Iterator[Read], size: int) -> None:
        self._reads = reads
        self._size = size
        self.next = next(reads, None)

    def __iter__(self) -> Iterator[Read]:
        if self.next is not None:
            yield self.next
            yield from islice(self._reads, self._size - 1)
        self.next = next(self._reads, None)
