"""Grades as clinicians write them: III/VI, 3/6, 2-3/6, II-III/VI, or 3 alone.

Scales: of six (Levine; Freeman and Levine 1933) and of four (diastolic murmurs; common practice, no source).
"""

from __future__ import annotations

import re
import unicodedata
from typing import Final

from fhirgallop.exam.entry import Grade

SCALES: Final = (4, 6)
_ROMAN: Final = {
    roman: number
    for number, roman in enumerate(("I", "II", "III", "IV", "V", "VI", "VII", "VIII", "IX", "X"), start=1)
}
_ONE: Final = "([0-9]{1,2}|[IVX]{1,4})"
_GRADE: Final = re.compile(rf"{_ONE}(?:/{_ONE})?(?:-{_ONE})?(?:/{_ONE})?", re.ASCII)


def read(text: str, of: int) -> Grade | str:
    """The grade that `text` means on a scale of `of` unless it names its own, or why it means none.

    Whether 7 of 6 can be is left to the checks of the examination.
    """
    plain = unicodedata.normalize("NFKC", text[:40]).upper()
    plain = re.sub("[\u2010-\u2015\u2212]", "-", "".join(plain.split()))
    match = _GRADE.fullmatch(plain)
    if not match:
        return "it is not a grade such as III/VI, 3/6, 2-3/6 or 3"
    low, first_scale, high, last_scale = (_number(part) for part in match.groups())
    if -1 in (low, first_scale, high, last_scale):
        return "it holds a Roman number that does not exist"
    scales = {scale for scale in (first_scale, last_scale) if scale is not None}
    if len(scales) > 1:
        return "its two ends are of different scales"
    scale = scales.pop() if scales else of
    if scale not in SCALES and scale != of:
        return f"its scale is neither {of} nor 4 nor 6"
    return Grade(low or 0, low or 0 if high is None else high, scale)


def _number(part: str | None) -> int | None:
    if part is None:
        return None
    return int(part) if part.isdecimal() else _ROMAN.get(part, -1)
