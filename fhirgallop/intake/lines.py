"""Lines of a byte stream with their numbers, in flat memory whatever is sent."""

from __future__ import annotations

import re
from collections.abc import Iterator
from typing import BinaryIO, Final

_CHUNK: Final = 64 * 1024
_LINE: Final = re.compile(rb"[^\r\n]*(?:\r\n|\r|\n)")


def numbered(stream: BinaryIO, most: int) -> Iterator[tuple[int, bytes | None]]:
    """Each line with its number from 1, its end (CR, LF or CRLF) kept; None for one of over `most` bytes."""
    number, rest, skipping = 0, b"", False
    while chunk := stream.read(_CHUNK):
        # A CR at the very end may be half of a CRLF: it waits for the next chunk.
        data, rest = rest + chunk, b""
        end = 0
        for found in _LINE.finditer(data):
            if found.end() == len(data) and data.endswith(b"\r"):
                break
            end = found.end()
            number += 1
            whole = found.group()
            yield number, None if skipping or len(whole) > most else whole
            skipping = False
        rest = data[end:]
        if len(rest) > most:
            skipping, rest = True, rest[-1:]
    if rest or skipping:
        yield number + 1, None if skipping or len(rest) > most else rest
