"""Codes parts of a file in a worker process: each part written whole, then entered in the journal."""

from __future__ import annotations

import gzip
import io
import zlib
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from dataclasses import dataclass
from itertools import islice
from pathlib import Path
from typing import BinaryIO, Final, cast

import msgspec

from fhirgallop.bulk.coding import Coded, code, template_of
from fhirgallop.bulk.folder import ERRORS, OUTCOME, Entry, ErrorRow, Folder, LineFiles, part_name, whole
from fhirgallop.bulk.repeats import FOLDER as KEYS
from fhirgallop.bulk.repeats import Keys
from fhirgallop.bulk.tally import Tally
from fhirgallop.bulk.wish import LIMITS, Source, Wish
from fhirgallop.exam.context import Context
from fhirgallop.exam.exam import Exam
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
    """The bytes of a file between two offsets."""

    def __init__(self, file: BinaryIO, start: int, end: int | None) -> None:
        super().__init__()
        file.seek(start)
        self._file = file
        self._left = end - start if end is not None else None

    def read(self, size: int = -1) -> bytes:
        """The next `size` bytes at most."""
        if self._left is None:
            return self._file.read(size)
        data = self._file.read(min(size, self._left) if size >= 0 else self._left)
        self._left -= len(data)
        return data


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
        with job.source.path.open("rb") as file:
            reads = self._reads(job, file)
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

    def _reads(self, job: Job, file: BinaryIO) -> Iterator[Read]:
        source = job.source
        kind = next(name for name, kind in BY_CONTENT_TYPE.items() if kind == source.kind)
        name = str(source.path)
        stream: BinaryIO = cast("BinaryIO", Range(file, job.start.offset, job.end))
        if source.packed:
            stream = cast("BinaryIO", gzip.GzipFile(fileobj=file, mode="rb"))
        line = job.start.line
        try:
            for read in open_records(stream, content_type=kind, name=name, limits=LIMITS, since=job.start):
                line = read.line
                yield read
        except (EOFError, gzip.BadGzipFile, zlib.error):
            text = (
                "The compressed file is broken from here on; pack it again, or send what follows by itself."
            )
            yield refused(name, line, "fatal", "gzip-broken", text)

    def _part(self, job: Job, part: int, reads: Iterator[Read], is_last: Callable[[], bool]) -> None:
        name = part_name(job.file, part)
        tally, keys = Tally(), Keys(job.file)
        with ExitStack() as stack:
            files = LineFiles(self._folder, name, stack, packed=self._wish.packed)
            said = 0
            for said, read in enumerate(reads, 1):
                coded = code(read, self._template, self._wish)
                self._keep(coded, files)
                tally.add(coded, wordings=self._wish.wordings)
                self._note(read, coded, keys, tally)
                if said % _SAY_EACH == 0:
                    self._say(_SAY_EACH)
            self._say(said % _SAY_EACH)
            if keys.rows:
                place = self._folder.path / KEYS
                place.mkdir(exist_ok=True)
                stack.enter_context(whole(place / name)).write(keys.as_bytes())
            written = files.written()
        self._folder.commit(name, Entry(written, tally.as_dict(), is_last()))

    def _keep(self, coded: Coded, files: LineFiles) -> None:
        for kind, text in coded.lines:
            files.add(kind, text)
        outcome = coded.outcome()
        if outcome is not None:
            files.add(OUTCOME, outcome)
        for issue in coded.issues:
            if issue.is_error:
                files.add(ERRORS, msgspec.json.encode(ErrorRow.of(issue)))

    def _note(self, read: Read, coded: Coded, keys: Keys, tally: Tally) -> None:
        """Its keys, to find what comes twice; and what the rules would say, of one in so many."""
        exam = coded.result.exam if coded.result else None
        if exam is None or not coded.lines:
            return
        rank = keys.add(exam, read)
        if self._wish.review_each and rank % self._wish.review_each == 0:
            tally.add_review(review(exam, _nothing_known(exam, self._wish)))


def _nothing_known(exam: Exam, wish: Wish) -> Context:
    """The context of a patient whose chart is not at hand."""
    return Context(wish.recorded, patient=exam.patient)


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
