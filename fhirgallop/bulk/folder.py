"""The folder of a run: files that appear whole, and the journal of the parts that are done.

A part's own files come first, its entry in the journal last: what has an entry is whole, and what has none is
done again and comes out the same. So a run may be killed at any moment.
"""

from __future__ import annotations

import gzip
import os
from collections import Counter
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Any, Final, cast

import msgspec

JOURNAL: Final = "journal"
_TEMPORARY: Final = ".writing"
_LEVEL: Final = 1  # gzip: output is most of the work of a fast run, and level 6 would double it for 15 % less


def part_name(file: int, part: int) -> str:
    """Name of a part: the file's place in the input, and the part's place in the file."""
    return f"{file:05d}-{part:07d}"


@contextmanager
def whole(path: Path) -> Iterator[IO[bytes]]:
    """A file that appears at `path` when the block ends well, on disk, and not at all otherwise."""
    temporary = path.with_name(f".{path.name}.{os.getpid()}{_TEMPORARY}")
    try:
        with temporary.open("wb", buffering=1 << 18) as file:
            yield file
            file.flush()
            os.fsync(file.fileno())
        temporary.replace(path)
    finally:
        temporary.unlink(missing_ok=True)


def write_json(path: Path, value: Any) -> None:
    """A JSON file, whole."""
    with whole(path) as file:
        file.write(msgspec.json.format(msgspec.json.encode(value), indent=2) + b"\n")


@dataclass(frozen=True, slots=True)
class Entry:
    """What the journal says of a part.

    Attributes:
        files: folder (resource type), name and count of lines of each file that was written.
        tally: what `Tally.as_dict` gave.
        last: no part of the same file comes after it.
    """

    files: tuple[tuple[str, str, int], ...]
    tally: dict[str, Any]
    last: bool


class Folder:
    """Where a run writes."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self.journal = path / JOURNAL

    def prepare(self) -> None:
        """Makes the folder, and clears away what a killed run was just writing."""
        self.journal.mkdir(parents=True, exist_ok=True)
        for left in self.path.glob(f"*/.*{_TEMPORARY}"):
            left.unlink(missing_ok=True)
        for left in self.path.glob(f".*{_TEMPORARY}"):
            left.unlink(missing_ok=True)

    def is_done(self, part: str) -> bool:
        """Whether a part is whole."""
        return (self.journal / part).exists()

    def entry(self, part: str) -> Entry:
        """The journal's entry of a part that is done."""
        return msgspec.json.decode((self.journal / part).read_bytes(), type=Entry)

    def entries(self) -> Iterator[tuple[str, Entry]]:
        """All entries, in the order of the input."""
        for path in sorted(self.journal.iterdir()):
            if not path.name.startswith("."):
                yield path.name, self.entry(path.name)

    def commit(self, part: str, entry: Entry) -> None:
        """The part is done: its files are all there."""
        with whole(self.journal / part) as file:
            file.write(msgspec.json.encode(entry))


class LineFiles:
    """The NDJSON files of one part, a folder a kind of line; they appear when `stack` ends well."""

    def __init__(self, folder: Folder, part: str, stack: ExitStack, *, packed: bool) -> None:
        self._folder = folder
        self._name = f"{part}.ndjson{'.gz' if packed else ''}"
        self._stack = stack
        self._packed = packed
        self._files: dict[str, IO[bytes]] = {}
        self._lines: Counter[str] = Counter()

    def add(self, kind: str, text: bytes) -> None:
        """One line of one kind."""
        file = self._files.get(kind)
        if file is None:
            file = self._files[kind] = self._start(kind)
        file.write(text + b"\n")
        self._lines[kind] += 1

    def written(self) -> tuple[tuple[str, str, int], ...]:
        """Folder, name and lines of each."""
        return tuple((kind, self._name, count) for kind, count in sorted(self._lines.items()))

    def _start(self, kind: str) -> IO[bytes]:
        place = self._folder.path / kind
        place.mkdir(exist_ok=True)
        file = self._stack.enter_context(whole(place / self._name))
        if not self._packed:
            return file
        # no name and no time in the file: the same lines are the same bytes
        packed = gzip.GzipFile("", "wb", _LEVEL, file, mtime=0)
        return cast("IO[bytes]", self._stack.enter_context(packed))
