"""Reads a FHIRPath expression into its tree: precedence climbing over the operators' table.

Source: FHIRPath N1 (v2.0.0), section 6.8 "Operator precedence" and the grammar of appendix B.
"""

from __future__ import annotations

from decimal import Decimal

from fhirgallop.conformance.fhirpath.quantity import CALENDAR_UNITS, Quantity
from fhirgallop.conformance.fhirpath.syntax import (
    Binary,
    Call,
    Item,
    Literal,
    Member,
    Special,
    Tree,
    TypeTest,
    Unary,
    Variable,
)
from fhirgallop.conformance.fhirpath.temporal import Temporal
from fhirgallop.conformance.fhirpath.tokens import ExpressionError, Token, tokenize

MAX_DEPTH = 100

# Binding power of each binary operator; all are left associative.
_POWER = {
    "implies": 1,
    "or": 2,
    "xor": 2,
    "and": 3,
    "in": 4,
    "contains": 4,
    "=": 5,
    "~": 5,
    "!=": 5,
    "!~": 5,
    "<": 6,
    ">": 6,
    "<=": 6,
    ">=": 6,
    "|": 7,
    "is": 8,
    "as": 8,
    "+": 9,
    "-": 9,
    "&": 9,
    "*": 10,
    "/": 10,
    "div": 10,
    "mod": 10,
}
_UNARY_POWER = 11
_SPECIALS = ("$this", "$index", "$total")


def parse(text: str) -> Tree:
    """The tree of an expression.

    Raises:
        ExpressionError: the text is not FHIRPath, or is nested more than 100 deep.
    """
    reader = _Reader(tokenize(text))
    tree = reader.expression(0)
    reader.expect_end()
    return tree


class _Reader:
    """The tokens and how far they are read."""

    def __init__(self, tokens: list[Token]) -> None:
        self._tokens = tokens
        self._at = 0
        self._depth = 0

    def expression(self, power: int) -> Tree:
        self._depth += 1
        if self._depth > MAX_DEPTH:
            raise ExpressionError(f"the expression is nested more than {MAX_DEPTH} deep")
        left = self._operand()
        while True:
            token = self._peek()
            binding = _POWER.get(token.text, 0) if token.kind in ("symbol", "name") else 0
            if binding <= power:
                break
            self._at += 1
            if token.text in ("is", "as"):
                left = TypeTest(token.text, left, self._type_name())
            else:
                left = Binary(token.text, left, self.expression(binding))
        self._depth -= 1
        return left

    def expect_end(self) -> None:
        token = self._peek()
        if token.kind != "end":
            raise ExpressionError(f"nothing more is expected at character {token.at + 1}")

    def _operand(self) -> Tree:
        token = self._peek()
        if token.kind == "symbol" and token.text in ("+", "-"):
            self._at += 1
            return Unary(token.text, self.expression(_UNARY_POWER))
        tree = self._term()
        while True:
            if self._accept("."):
                tree = self._invocation(tree)
            elif self._accept("["):
                tree = Item(tree, self.expression(0))
                self._expect("]")
            else:
                return tree

    def _term(self) -> Tree:
        token = self._peek()
        if token.kind == "symbol":
            return self._bracketed()
        if token.kind in ("name", "special") and token.text not in ("true", "false"):
            return self._invocation(None)
        self._at += 1
        match token.kind:
            case "name":
                return Literal(token.text == "true")
            case "string":
                return Literal(token.text)
            case "number":
                return self._number(token.text)
            case "moment" | "time":
                return Literal(_temporal(token))
            case "variable":
                return Variable(token.text)
            case _:
                raise ExpressionError(f"an operand is missing at character {token.at + 1}")

    def _bracketed(self) -> Tree:
        if self._accept("("):
            tree = self.expression(0)
            self._expect(")")
            return tree
        if self._accept("{"):
            self._expect("}")
            return Literal(None)
        raise ExpressionError(f"an operand is missing at character {self._peek().at + 1}")

    def _invocation(self, base: Tree | None) -> Tree:
        token = self._next()
        if token.kind == "special" and base is None:
            if token.text not in _SPECIALS:
                raise ExpressionError(f"{token.text} is not known to FHIRPath")
            return Special(token.text)
        if token.kind == "special" and token.text == "$this" and base is not None:
            return base  # `x.$this` is x
        if token.kind != "name":
            raise ExpressionError(f"a name is missing at character {token.at + 1}")
        if not self._accept("("):
            return Member(base, token.text)
        arguments: list[Tree] = []
        if not self._accept(")"):
            arguments.append(self.expression(0))
            while self._accept(","):
                arguments.append(self.expression(0))
            self._expect(")")
        return Call(base, token.text, tuple(arguments))

    def _number(self, text: str) -> Literal:
        value = Decimal(text) if "." in text else int(text)
        token = self._peek()
        if token.kind == "string":
            self._at += 1
            return Literal(Quantity(Decimal(value), token.text))
        if token.kind == "name" and token.text in CALENDAR_UNITS:
            self._at += 1
            return Literal(Quantity(Decimal(value), CALENDAR_UNITS[token.text]))
        return Literal(value)

    def _type_name(self) -> str:
        name = self._expect_name()
        while self._accept("."):
            name += "." + self._expect_name()
        return name

    def _peek(self) -> Token:
        return self._tokens[self._at]

    def _next(self) -> Token:
        token = self._tokens[self._at]
        if token.kind == "end":
            raise ExpressionError("the expression breaks off")
        self._at += 1
        return token

    def _accept(self, symbol: str) -> bool:
        token = self._tokens[self._at]
        if token.kind == "symbol" and token.text == symbol:
            self._at += 1
            return True
        return False

    def _expect(self, symbol: str) -> None:
        if not self._accept(symbol):
            raise ExpressionError(f"{symbol} is missing at character {self._peek().at + 1}")

    def _expect_name(self) -> str:
        token = self._next()
        if token.kind != "name":
            raise ExpressionError(f"a type's name is missing at character {token.at + 1}")
        return token.text


def _temporal(token: Token) -> Temporal:
    text = token.text[1:]
    value = Temporal.parse_time(text[1:]) if token.kind == "time" else Temporal.parse(text)
    if value is None:
        raise ExpressionError(f"no date or time can be read at character {token.at + 1}")
    return value
