"""Large texts are kept compressed: an examination's Bundle takes an eighth of its size."""

from __future__ import annotations

import zlib
from typing import Any, Final

from sqlalchemy import Dialect, LargeBinary
from sqlalchemy.types import TypeDecorator

# what is kept begins so; anything else is kept as it is, and no JSON text begins so
_MARK: Final = b"\0z"
# below this there is nothing to win
_SMALLEST: Final = 512
_LEVEL: Final = 1


class Packed(TypeDecorator[bytes]):
    """Bytes, compressed on their way in and as they were on their way out (RFC 1950, fastest level)."""

    impl = LargeBinary
    cache_ok = True

    @property
    def python_type(self) -> type[bytes]:
        """What comes and goes."""
        return bytes

    def process_bind_param(self, value: bytes | None, dialect: Dialect) -> bytes | None:  # noqa: ARG002 - SQLAlchemy's form
        """As it is kept."""
        if value is None or (len(value) < _SMALLEST and not value.startswith(_MARK)):
            return value
        return _MARK + zlib.compress(value, _LEVEL)

    def process_result_value(self, value: Any | None, dialect: Dialect) -> bytes | None:  # noqa: ARG002 - SQLAlchemy's form
        """As it was."""
        if value is None or not value.startswith(_MARK):
            return value
        return zlib.decompress(value[len(_MARK) :])
