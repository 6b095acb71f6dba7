"""Words of a record made fit for FHIR strings and for XHTML.

Sources: FHIR R4 data types (string, code, markdown) and "Narrative".
"""

from __future__ import annotations

import re
from typing import Final

_CONTROL: Final = re.compile("[\x00-\x08\x0b\x0c\x0e-\x1f\x7f-\x9f\ud800-\udfff\ufffe\uffff]")
_BLANKS: Final = re.compile(r"\s+")
_MARKUP: Final = str.maketrans({"&": "&amp;", "<": "&lt;", ">": "&gt;", '"': "&quot;"})
_WITHDRAWN: Final = "Entered in error: "
_DIV: Final = '<div xmlns="http://www.w3.org/1999/xhtml">'


def plain(text: str) -> str:
    """`text` without control characters and blank ends: a FHIR string, or empty."""
    return text.strip() if text.isprintable() else _CONTROL.sub("", text).strip()


def code(text: str) -> str:
    """`text` as a FHIR code: single spaces inside, none around."""
    if text.isprintable() and "  " not in text:  # of all white space, only the space itself can be printed
        return text.strip()
    return _BLANKS.sub(" ", plain(text)).strip()


def escaped(text: str) -> str:
    """`text` for the inside of an XHTML element or attribute."""
    return text.translate(_MARKUP)


def narrative(paragraph: str, *, withdrawn: bool = False) -> dict[str, str]:
    """FHIR Narrative of one paragraph that is already escaped; of a resource taken back it says so first."""
    told = {"status": "generated", "div": f"{_DIV}<p>{paragraph}</p></div>"}
    return taken_back(told) if withdrawn else told


def taken_back(told: dict[str, str]) -> dict[str, str]:
    """A narrative of ours, for a resource that is entered in error now."""
    return {**told, "div": told["div"].replace("<p>", f"<p>{_WITHDRAWN}", 1)}
