"""Function: one entry of the table of FHIRPath functions, and how its arguments are read."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

from fhirgallop.conformance.fhirpath.frame import Code, Frame, argument
from fhirgallop.conformance.fhirpath.items import CannotJudge, Collection, singleton

Body = Callable[[Collection, Frame, Sequence[Code]], Collection]


@dataclass(frozen=True, slots=True)
class Function:
    """A function.

    Attributes:
        body: focus, frame and compiled arguments -> collection.
        least: fewest arguments.
        most: most arguments.
        per_item: its arguments are run for each item of the focus with `$this` set, not for the surroundings.
    """

    body: Body
    least: int = 0
    most: int = 0
    per_item: bool = False


def text_argument(code: Code, frame: Frame) -> str | None:
    """A text argument; None when it is empty.

    Raises:
        CannotJudge: it is no text.
    """
    value = singleton(argument(code, frame))
    if value is not None and not isinstance(value, str):
        raise CannotJudge("a function was given something else than the text it takes")
    return value


def integer_argument(code: Code, frame: Frame) -> int | None:
    """A whole-number argument; None when it is empty.

    Raises:
        CannotJudge: it is no whole number.
    """
    value: Any = singleton(argument(code, frame))
    if value is not None and (isinstance(value, bool) or not isinstance(value, int)):
        raise CannotJudge("a function was given something else than the whole number it takes")
    return value
