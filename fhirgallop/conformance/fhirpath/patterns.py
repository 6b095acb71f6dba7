"""Regular expressions of rules, run in bounded time.

`found` uses an engine whose time is linear in the text whatever the pattern; what it does not take
(look-around, back references) is not judged. Replacement needs Python's engine, so only patterns and texts
which cannot blow up there are let in.
Source: FHIRPath N1 (v2.0.0), section 5.6.9 (a match anywhere in the text; `.` matches line ends).
"""

from __future__ import annotations

import re
from functools import lru_cache
from typing import Any

import jsonschema_rs

from fhirgallop.conformance.fhirpath.items import CannotJudge

_SIZE_LIMIT = 10_000_000
_MAX_PATTERN = 2_000
_MAX_REPLACED_TEXT = 5_000
# a quantifier on a group, or two open-ended ones, may take more than linear time
_RISKY = re.compile(r"\)[*+?{]|[*+}].*[*+}]", re.DOTALL)


def found(pattern: str, text: str) -> bool:
    """True when the pattern matches somewhere in the text.

    Raises:
        CannotJudge: the pattern is not one this engine takes.
    """
    # a lone surrogate is no character; it is put by one that no pattern names
    return bool(_validator(pattern).is_valid(text.encode("utf-8", "replace").decode()))


@lru_cache(maxsize=512)
def _validator(pattern: str) -> Any:
    if len(pattern) > _MAX_PATTERN:
        raise CannotJudge("a regular expression of the rule is too long")
    options = jsonschema_rs.RegexOptions(size_limit=_SIZE_LIMIT, dfa_size_limit=_SIZE_LIMIT)
    try:
        return jsonschema_rs.validator_for(
            {"pattern": _dots_match_line_ends(pattern)}, pattern_options=options
        )
    except (ValueError, UnicodeError) as error:
        raise CannotJudge("a regular expression of the rule cannot be run here") from error


def _dots_match_line_ends(pattern: str) -> str:
    """The pattern with every `.` that stands for a character written so that it takes line ends too.

    The engine reads patterns as JSON Schema does, where a dot stops at a line end whatever the flags say.
    """
    written = []
    inside = escaped = False
    for sign in pattern:
        if escaped:
            escaped = False
        elif sign == "\\":
            escaped = True
        elif sign == "[":
            inside = True
        elif sign == "]":
            inside = False
        elif sign == "." and not inside:
            sign = "[\\s\\S]"  # noqa: PLW2901 - the sign as the engine wants it
        written.append(sign)
    return "".join(written)


def replace(pattern: str, text: str, new: str) -> str:
    """The text with every match replaced; `$1` in the new text stands for a group.

    Raises:
        CannotJudge: pattern or text could take too long, or the pattern is broken.
    """
    if _RISKY.search(pattern) or len(pattern) > _MAX_PATTERN or len(text) > _MAX_REPLACED_TEXT:
        raise CannotJudge("a regular expression of the rule could take too long to run")
    try:
        return re.sub(pattern, re.sub(r"\$([0-9])", r"\\\1", new), text, flags=re.DOTALL | re.ASCII)
    except (re.error, IndexError, RecursionError) as error:
        raise CannotJudge("a regular expression of the rule cannot be run here") from error
