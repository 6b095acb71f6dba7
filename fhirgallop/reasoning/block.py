"""One group of keys in a rule file, read key by key; whatever does not fit is a fault."""

from __future__ import annotations

from collections.abc import Iterable
from decimal import Decimal, InvalidOperation
from typing import Final

from fhirgallop.codes import units
from fhirgallop.reasoning.faults import Faults
from fhirgallop.reasoning.yaml_tree import Items, Pairs, Text, Tree

_YES: Final = {"yes": True, "true": True, "no": False, "false": False}


class Block:
    """A mapping of a rule file; anything else is a fault and reads as an empty one."""

    def __init__(self, tree: Tree | None, what: str, allowed: Iterable[str], faults: Faults) -> None:
        self.faults = faults
        self.what = what
        self.line = tree.line if tree is not None else 0
        self._pairs: dict[str, tuple[Text, Tree]] = {}
        if isinstance(tree, Pairs):
            self._pairs = {key.text: (key, value) for key, value in tree.items}
        elif tree is not None:
            self.fault("rules-form", f"{what} is written as keys with values.")
        known = tuple(allowed)
        for name, (key, _) in self._pairs.items():
            if name not in known:
                hint = faults.near(name, known)
                self.fault("rules-unknown-key", f"{what} has no key {name}.{hint}", line=key.line)

    def fault(self, rule: str, text: str, *, line: int = 0) -> None:
        """Notes a fault at `line`, or at the start of the block."""
        self.faults.add(line or self.line, rule, text)

    def __contains__(self, key: str) -> bool:
        return key in self._pairs

    def tree(self, key: str) -> Tree | None:
        """What stands under a key."""
        return self._pairs[key][1] if key in self._pairs else None

    def line_of(self, key: str) -> int:
        """The line of a key, or of the block."""
        return self._pairs[key][0].line if key in self._pairs else self.line

    def text(self, key: str, *, needed: bool = False, default: str = "") -> str:
        """A single text."""
        tree = self.tree(key)
        if isinstance(tree, Text) and (tree.text.strip() or not needed):
            return " ".join(tree.text.split())
        if tree is not None:
            self.fault("rules-form", f"{self.what}: {key} is one text.", line=tree.line)
        elif needed:
            self.fault("rules-missing-key", f"{self.what} lacks {key}.")
        return default

    def one_of(self, key: str, known: Iterable[str], *, default: str = "", needed: bool = False) -> str:
        """A text out of a fixed list."""
        choices = tuple(known)
        found = self.text(key, needed=needed, default=default)
        if found and found not in choices:
            hint = self.faults.near(found, choices) or f" It is one of {', '.join(choices)}."
            self.fault(
                "rules-unknown-value", f"{self.what}: {key} cannot be {found}.{hint}", line=self.line_of(key)
            )
            return default or choices[0]
        return found or default or choices[0]

    def texts(self, key: str) -> tuple[str, ...]:
        """A list of texts; a single text counts as a list of one."""
        tree = self.tree(key)
        if isinstance(tree, Text):
            return (tree.text.strip(),) if tree.text.strip() else ()
        if tree is None:
            return ()
        if isinstance(tree, Items) and all(isinstance(item, Text) for item in tree.items):
            return tuple(item.text.strip() for item in tree.items if isinstance(item, Text))
        self.fault("rules-form", f"{self.what}: {key} is a list of texts.", line=tree.line)
        return ()

    def flag(self, key: str) -> bool:
        """Yes or no; no when it is not written."""
        word = self.text(key, default="no").casefold()
        if word not in _YES:
            self.fault("rules-form", f"{self.what}: {key} is yes or no.", line=self.line_of(key))
        return _YES.get(word, False)

    def number(self, key: str, *, default: int | None = None) -> int | None:
        """A whole number."""
        if key not in self._pairs:
            return default
        word = self.text(key)
        if not word.isascii() or not word.isdigit() or len(word) > 9:
            self.fault("rules-form", f"{self.what}: {key} is a whole number.", line=self.line_of(key))
            return default
        return int(word)

    def pairs(self, key: str) -> tuple[tuple[Text, Tree], ...]:
        """The keys and values under a key."""
        tree = self.tree(key)
        if tree is None:
            return ()
        if isinstance(tree, Pairs):
            return tree.items
        self.fault("rules-form", f"{self.what}: {key} is written as keys with values.", line=tree.line)
        return ()


def quantity(text: str, unit: str) -> Decimal | str:
    """The number of `16 mm[Hg]` in `unit` (any unit of its kind when `unit` is empty), or why it is none."""
    word, _, written = text.strip().partition(" ")
    try:
        value = Decimal(word)
    except InvalidOperation:
        return f"{text[:40]} is not a number with a unit, such as 16 mm[Hg]"
    found = units.table().find(written.strip() or "1")
    target = units.table().by_code.get(unit)
    if found is None or not value.is_finite():
        return f"{written[:40] or 'a number without a unit'} is not a unit known here"
    if not unit:
        return value
    if target is None or found.dimension != target.dimension:
        return f"{found.code} does not measure what is measured in {unit}"
    return units.convert(value, found, target)


def written_unit(text: str) -> str:
    """The UCUM code of the unit in `16 mm[Hg]`; empty when there is none."""
    found = units.table().find(text.strip().partition(" ")[2].strip() or "1")
    return found.code if found else ""


def seconds(text: str) -> int | str:
    """The length of time of `24 h`, or why it is none."""
    found = quantity(text, "s")
    if isinstance(found, str):
        return f"{text[:40]} is not a length of time such as 24 h, 14 d or 12 mo"
    return int(found)
