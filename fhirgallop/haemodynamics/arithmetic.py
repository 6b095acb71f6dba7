"""Decimal arithmetic of the formulas: one precision for all, pi, and powers with a broken exponent."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from decimal import Context, Decimal, localcontext

PI = Decimal("3.141592653589793238462643383")
CIRCLE = PI / 4
"""A circle's area is CIRCLE times its diameter squared."""


@contextmanager
def working_precision() -> Iterator[None]:
    """28 significant digits, whatever the caller's decimal context is."""
    with localcontext(Context(prec=28)):
        yield


def cube_root(number: Decimal) -> Decimal:
    """The third root of a positive number, to the working precision."""
    third = Decimal(1) / 3
    return number**third
