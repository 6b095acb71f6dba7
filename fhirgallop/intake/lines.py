"""Lines of a byte stream with their numbers, in flat memory and linear time whatever is sent."""

from __future__ import annotations

from collections.abc import Iterator
from typing import BinaryIO, Final

_CHUNK: Final = 64 * 1024


def numbered(stream: BinaryIO, most: int, first: int = 1) -> Iterator[tuple[int, bytes | None]]:
    """Each line with its number, its end (CR, LF or CRLF) kept; None for one of over `most` bytes.

    `first` is the number of the line that the stream starts with.
    """
    for number, line, _ in spans(stream, most, first):
        yield number, line


def spans(stream: BinaryIO, most: int, first: int = 1) -> Iterator[tuple[int, bytes | None, int]]:
    """The same, each line with the offset in bytes from the start of the stream at which it has ended."""
    number, rest, skipping = first - 1, b"", False
    end = dropped = 0
    while chunk := stream.read(_CHUNK):
        lines = (rest + chunk).splitlines(keepends=True)
        # The last line goes on in the next chunk, unless it ends in LF; a CR may be half of a CRLF.
        rest = b"" if lines[-1].endswith(b"\n") else lines.pop()
        for line in lines:
            number += 1
            end, dropped = end + dropped + len(line), 0
            yield number, None if skipping or len(line) > most else line, end
            skipping = False
        if len(rest) > most:
            dropped += len(rest) - 1
            skipping, rest = True, rest[-1:]
    if rest or skipping:
        yield number + 1, None if skipping or len(rest) > most else rest, end + dropped + len(rest)
