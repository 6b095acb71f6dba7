"""Lines of a byte stream with their numbers, in flat memory and linear time whatever is sent."""

from __future__ import annotations

from collections.abc import Iterator
from typing import BinaryIO, Final

_CHUNK: Final = 64 * 1024


def numbered(stream: BinaryIO, most: int) -> Iterator[tuple[int, bytes | None]]:
    """Each line with its number from 1, its end (CR, LF or CRLF) kept; None for one of over `most` bytes."""
    number, rest, skipping = 0, b"", False
    while chunk := stream.read(_CHUNK):
        lines = (rest + chunk).splitlines(keepends=True)
        # The last line goes on in the next chunk, unless it ends in LF; a CR may be half of a CRLF.
        rest = b"" if lines[-1].endswith(b"\n") else lines.pop()
        for line in lines:
            number += 1
            yield number, None if skipping or len(line) > most else line
            skipping = False
        if len(rest) > most:
            skipping, rest = True, rest[-1:]
    if rest or skipping:
        yield number + 1, None if skipping or len(rest) > most else rest
