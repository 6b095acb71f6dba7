"""The tree of a FHIRPath expression.

Source: FHIRPath N1 (v2.0.0), section 3 "Path selection" to 6 "Operations".
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, TypeAlias


@dataclass(frozen=True, slots=True)
class Literal:
    """A constant: str, bool, int, Decimal, Temporal or Quantity; None stands for `{}`."""

    value: Any


@dataclass(frozen=True, slots=True)
class Variable:
    """`%name`: a value from around the expression."""

    name: str


@dataclass(frozen=True, slots=True)
class Special:
    """`$this`, `$index` or `$total`."""

    name: str


@dataclass(frozen=True, slots=True)
class Member:
    """`base.name`; without a base the focus is meant."""

    base: Tree | None
    name: str


@dataclass(frozen=True, slots=True)
class Call:
    """`base.name(arguments)`; without a base the focus is meant."""

    base: Tree | None
    name: str
    arguments: tuple[Tree, ...]


@dataclass(frozen=True, slots=True)
class Item:
    """`base[index]`."""

    base: Tree
    index: Tree


@dataclass(frozen=True, slots=True)
class Unary:
    """`+operand` or `-operand`."""

    operator: str
    operand: Tree


@dataclass(frozen=True, slots=True)
class Binary:
    """`left operator right`."""

    operator: str
    left: Tree
    right: Tree


@dataclass(frozen=True, slots=True)
class TypeTest:
    """`operand is type` or `operand as type`; the type may carry a namespace ("System.String")."""

    operator: str
    operand: Tree
    type_name: str


Tree: TypeAlias = Literal | Variable | Special | Member | Call | Item | Unary | Binary | TypeTest
