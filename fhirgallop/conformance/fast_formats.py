"""Formats of the fast pass: schemas of primitives, a little narrower than FHIR's own.

What they refuse (codes beyond ASCII, other languages' digits) goes the thorough way. Patterns of one class of
characters and then small ones are run several times faster than others: so they are tried first where both
stand, and moments are read by a built-in format.
"""

from __future__ import annotations

from collections.abc import Mapping
from copy import deepcopy
from typing import Any

UUID = "urn:uuid:[0-9a-f]{8}-[0-9a-f]{4}-[0-9a-f]{4}-[0-9a-f]{4}-[0-9a-f]{12}"
ID = r"[A-Za-z0-9\-.]{1,64}"
_DAY = "((0[1-9]|1[0-2])-(0[1-9]|1[0-9]|2[0-8])|(0[13-9]|1[0-2])-(29|30)|(0[13578]|1[02])-31)"
_DATE = f"^[1-9][0-9]{{3}}(-(0[1-9]|1[0-2]|{_DAY}))?$"
# RFC 3339 says the rest of a moment; FHIR has no lower case, no later zone, and nine digits of a second
_MOMENT = {
    "format": "date-time",
    "pattern": r"^[1-9][0-9T:.\-]+(Z|[+\-](0|1[0-3]))",
    "maxLength": len("2026-03-04T10:00:00.123456789Z"),
}
TEXT = r"^[^\x00-\x08\x0B\x0C\x0E-\x1F]+$"

# narrative of plain blocks without attributes, which the narrative clause takes as it is
_PLAIN = r"[^<>&\x00-\x08\x0B\x0C\x0E-\x1F\x7F-\x9F\uFFFE\uFFFF]"
_SAID = f"({_PLAIN}|&(amp|lt|gt|quot|apos);)"
_INLINE = f"({_SAID}|<b>{_SAID}*</b>|<i>{_SAID}*</i>|<br/>)"
_BLOCK = f"(<p>{_INLINE}*</p>|<ul>(<li>{_INLINE}*</li>)+</ul>)"
_FIRST = f"[A-Za-z0-9(]{_INLINE}*"
_OPEN = r'^<div xmlns="http://www\.w3\.org/1999/xhtml">'
# a paragraph alone is so frequent, and its pattern so much smaller, that it is tried first
_PARAGRAPH = rf"{_OPEN}<p>[A-Za-z0-9(]{_PLAIN}*</p></div>$"
_DIV = (
    f"{_OPEN}({_FIRST}|<p>{_FIRST}</p>{_BLOCK}*|<p><b>{_FIRST}</b>{_INLINE}*</p>{_BLOCK}*"
    f"|<ul><li>{_FIRST}</li>(<li>{_INLINE}*</li>)*</ul>{_BLOCK}*)</div>$"
)
_PATTERNS: Mapping[str, str] = {
    "id": f"^{ID}$",
    "uri": "^[!-~]+$",
    "url": "^[!-~]+$",
    "canonical": '^[!"$-~][!-~]*$',
    "oid": r"^urn:oid:[0-2](\.(0|[1-9][0-9]*))+$",
    "uuid": f"^{UUID}$",
    "date": _DATE,
    "time": r"^([01][0-9]|2[0-3]):[0-5][0-9]:[0-5][0-9](\.[0-9]{1,9})?$",
    "base64Binary": "^([A-Za-z0-9+/]{4})+([A-Za-z0-9+/]{2}==|[A-Za-z0-9+/]{3}=)?$",
}
_ANY: Mapping[str, Any] = {"type": "string", "pattern": TEXT, "maxLength": 2**20}
_FORMATS: Mapping[str, Mapping[str, Any]] = {
    **{name: {"type": "string", "pattern": pattern} for name, pattern in _PATTERNS.items()},
    "xhtml": {"type": "string", "anyOf": [{"pattern": _PARAGRAPH}, {"pattern": _DIV}]},
    "code": {"type": "string", "anyOf": [{"pattern": "^[!-~]+$"}, {"pattern": "^[!-~]+( [!-~]+)*$"}]},
    "instant": {"type": "string", **_MOMENT},
    "dateTime": {"type": "string", "anyOf": [_MOMENT, {"pattern": _DATE}]},
}


def text(name: str) -> dict[str, Any]:
    """The schema of a primitive that is written as text."""
    return deepcopy({**_FORMATS.get(name, _ANY)})
