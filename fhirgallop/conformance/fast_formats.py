"""Formats of the fast pass: regular expressions of primitives, a little narrower than FHIR's own.

What they refuse (29 February, codes with inner spaces, other languages' digits) goes the thorough way.
"""

from __future__ import annotations

from collections.abc import Mapping

UUID = "urn:uuid:[0-9a-f]{8}-[0-9a-f]{4}-[0-9a-f]{4}-[0-9a-f]{4}-[0-9a-f]{12}"
ID = r"[A-Za-z0-9\-.]{1,64}"
_DAY = "((0[1-9]|1[0-2])-(0[1-9]|1[0-9]|2[0-8])|(0[13-9]|1[0-2])-(29|30)|(0[13578]|1[02])-31)"
_TIME = r"([01][0-9]|2[0-3]):[0-5][0-9]:[0-5][0-9](\.[0-9]{1,9})?"
_ZONE = r"(Z|[+-](0[0-9]|1[0-3]):[0-5][0-9])"
TEXT = r"^[^\x00-\x08\x0B\x0C\x0E-\x1F]+$"

# narrative of plain blocks without attributes, which the narrative clause takes as it is
_SAID = r"([^<>&\x00-\x08\x0B\x0C\x0E-\x1F\x7F-\x9F\uFFFE\uFFFF]|&(amp|lt|gt|quot|apos);)"
_INLINE = f"({_SAID}|<b>{_SAID}*</b>|<i>{_SAID}*</i>|<br/>)"
_BLOCK = f"(<p>{_INLINE}*</p>|<ul>(<li>{_INLINE}*</li>)+</ul>)"
_FIRST = f"[A-Za-z0-9(]{_INLINE}*"
_DIV = (
    r'^<div xmlns="http://www\.w3\.org/1999/xhtml">'
    f"({_FIRST}|<p>{_FIRST}</p>{_BLOCK}*|<p><b>{_FIRST}</b>{_INLINE}*</p>{_BLOCK}*"
    f"|<ul><li>{_FIRST}</li>(<li>{_INLINE}*</li>)*</ul>{_BLOCK}*)</div>$"
)
PATTERNS: Mapping[str, str] = {
    "id": f"^{ID}$",
    "code": "^[!-~]+$",
    "uri": "^[!-~]+$",
    "url": "^[!-~]+$",
    "canonical": '^[!"$-~][!-~]*$',
    "oid": r"^urn:oid:[0-2](\.(0|[1-9][0-9]*))+$",
    "uuid": f"^{UUID}$",
    "date": f"^[1-9][0-9]{{3}}(-(0[1-9]|1[0-2]|{_DAY}))?$",
    "dateTime": f"^[1-9][0-9]{{3}}(-(0[1-9]|1[0-2]|{_DAY}(T{_TIME}{_ZONE})?))?$",
    "instant": f"^[1-9][0-9]{{3}}-{_DAY}T{_TIME}{_ZONE}$",
    "time": f"^{_TIME}$",
    "base64Binary": "^([A-Za-z0-9+/]{4})+([A-Za-z0-9+/]{2}==|[A-Za-z0-9+/]{3}=)?$",
    "xhtml": _DIV,
    "string": TEXT,
    "markdown": TEXT,
}
