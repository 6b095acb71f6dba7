"""How names from a foreign resource may appear in an issue's text: names only, never content."""

from __future__ import annotations

import re
from collections.abc import Iterable

_PLAIN = re.compile(r"_?[A-Za-z][A-Za-z0-9]{0,63}", re.ASCII)
_CANONICAL = re.compile(r"https?://[A-Za-z0-9./_|-]{1,200}", re.ASCII)


def name(key: object) -> str:
    """A JSON key as the text may show it; a key that is no FHIR name could be anything and is not shown."""
    return f"'{key}'" if isinstance(key, str) and _PLAIN.fullmatch(key) else "an element"


def canonical(url: object) -> str:
    """A canonical address as the text may show it."""
    return url if isinstance(url, str) and _CANONICAL.fullmatch(url) else "(address not shown)"


def one_of(names: Iterable[str], limit: int = 8) -> str:
    """`a, b or c`; a long list is cut short."""
    items = sorted(names)
    if len(items) > limit:
        return ", ".join(items[:limit]) + f" or one of {len(items) - limit} more"
    if len(items) < 2:
        return "".join(items)
    return ", ".join(items[:-1]) + " or " + items[-1]
