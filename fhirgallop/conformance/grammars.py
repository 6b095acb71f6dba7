"""Codes of systems that no table enumerates but a published grammar describes.

Languages, media types, countries, currencies, units, time zones.

Sources: BCP 47 (languages), BCP 13 / RFC 6838 (media types), ISO 4217 (currencies, form only),
ISO 3166 and UN M49 (countries, form only), UCUM (characters only), IANA time zones (form only).
"""

from __future__ import annotations

import re
from collections.abc import Iterable

_WORD = r"[A-Za-z0-9!#$&^_.+-]{1,127}"
_GRAMMARS = {
    "urn:ietf:bcp:47": r"[A-Za-z]{2,8}(-[A-Za-z0-9]{1,8})*|[ixIX](-[A-Za-z0-9]{1,8})+",
    # FHIR's own short names stand beside media types where a format is asked for (R4 2.1.0.6)
    "urn:ietf:bcp:13": rf"{_WORD}/{_WORD}( *;[ -~]*)?|xml|json|ttl|html",
    "urn:iso:std:iso:4217": r"[A-Z]{3}",
    "urn:iso:std:iso:3166": r"[A-Z]{2,3}|[0-9]{3}",
    "urn:iso:std:iso:3166:-2": r"[A-Z]{2}-[A-Z0-9]{1,3}",
    "http://unstats.un.org/unsd/methods/m49/m49.htm": r"[0-9]{3}",
    "http://unitsofmeasure.org": r"[!-~]{1,200}",
    "https://www.iana.org/time-zones": r"[A-Za-z0-9_+-]+(/[A-Za-z0-9_+-]+)*",
    "http://hl7.org/fhir/color-rgb": r"#[0-9A-Fa-f]{6}",
}
_COMPILED = {system: re.compile(text, re.ASCII) for system, text in _GRAMMARS.items()}


def judge(systems: Iterable[str], code: str) -> bool | None:
    """Whether the code has the form of one of these systems' codes.

    Returns:
        None when one of the systems has no known grammar, so that nothing can be said.
    """
    verdict: bool | None = False
    for system in systems:
        grammar = _COMPILED.get(system)
        if grammar is None:
            verdict = None
        elif grammar.fullmatch(code):
            return True
    return verdict
