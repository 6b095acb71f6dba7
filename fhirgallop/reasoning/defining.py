"""Reads the vocabulary of rule files: cut-offs, windows, card families and the cost of looking again."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from decimal import Decimal
from typing import Final

from fhirgallop.exam.context import Source
from fhirgallop.reasoning.block import Block, quantity, seconds, written_unit
from fhirgallop.reasoning.faults import Faults
from fhirgallop.reasoning.vocabulary import Cutoff, Family, Recheck, Window
from fhirgallop.reasoning.yaml_tree import Items, Pairs, Text, Tree

TOP_KEYS: Final = (
    "cutoffs", "windows", "defaults", "conditions", "families", "rechecks", "rules", "likelihoods",
    "left-out",
)  # fmt: skip
EVERYTHING_ELSE: Final = "everything-else"
SITE_KEYS: Final = ("silence", "retune", "choose")
SEEN: Final = ("excerpt", "memory", "practice", "definition")

_FOREVER: Final = Window("permanent", None)


@dataclass(frozen=True, slots=True)
class Choice:
    """A site's value for a cut-off, with its source where it is the site's own, and where it is written."""

    value: str
    source: str
    file: str
    line: int


@dataclass(slots=True)
class Vocabulary:
    """The words defined so far; `defaults` maps an id's prefix to its window unless a rule says else."""

    cutoffs: dict[str, Cutoff] = field(default_factory=dict)
    windows: dict[str, Window] = field(default_factory=lambda: {"permanent": _FOREVER})
    defaults: dict[str, str] = field(default_factory=dict)
    families: dict[str, Family] = field(default_factory=dict)
    rechecks: list[Recheck] = field(default_factory=list)
    conditions: dict[str, tuple[Tree, str]] = field(default_factory=dict)
    left_out: dict[str, str] = field(default_factory=dict)

    def window_of(self, fact: str) -> Window:
        """The window of an id by its longest prefix."""
        best = max((p for p in self.defaults if fact.startswith(p)), key=len, default=EVERYTHING_ELSE)
        return self.windows.get(self.defaults.get(best, ""), _FOREVER)


def read_vocabulary(trees: Mapping[str, Tree], choices: Mapping[str, Choice], faults: Faults) -> Vocabulary:
    """All definitions of all files together.

    Args:
        trees: file name -> its tree, ours first, a site's last; a site's definition replaces ours.
        choices: cut-off name -> value chosen by the site, and its source.
        faults: what is wrong is noted here.
    """
    words = Vocabulary()
    for name, tree in trees.items():
        faults.source = name
        block = Block(tree, "A rule file", (*TOP_KEYS, *SITE_KEYS), faults)
        for key, value in block.pairs("windows"):
            words.windows[key.text] = _window(key.text, value, faults)
        for key, value in block.pairs("cutoffs"):
            words.cutoffs[key.text] = _cutoff(key.text, value, choices.get(key.text), faults)
        for key, value in block.pairs("families"):
            group = Block(value, f"Family {key.text}", ("title", "question"), faults)
            words.families[key.text] = Family(
                key.text, group.text("title", needed=True), group.text("question", needed=True)
            )
        for key, value in block.pairs("defaults"):
            words.defaults[key.text] = value.text if isinstance(value, Text) else ""
        for key, value in block.pairs("conditions"):
            words.conditions[key.text] = (value, name)
        for key, value in block.pairs("left-out"):
            reason = value.text if isinstance(value, Text) else ""
            words.left_out[key.text] = reason
            if not reason.strip():
                faults.add(key.line, "rules-missing-key", f"{key.text} is left out without a reason.")
        words.rechecks[:0] = _rechecks(block, faults)
        _check_defaults(block, words, faults)
    return words


def _check_defaults(block: Block, words: Vocabulary, faults: Faults) -> None:
    for key, value in block.pairs("defaults"):
        window = value.text if isinstance(value, Text) else ""
        if window not in words.windows:
            faults.add(
                key.line,
                "rules-unknown-window",
                f"There is no window {window}.{faults.near(window, words.windows)}",
            )


def _window(name: str, tree: Tree, faults: Faults) -> Window:
    block = Block(tree, f"Window {name}", ("within", "beyond", "same-encounter", "by-severity"), faults)
    lengths = []
    for key, value in block.pairs("by-severity"):
        length = seconds(value.text if isinstance(value, Text) else "")
        if isinstance(length, str):
            faults.add(key.line, "rules-window", f"Window {name}: {length}.")
        else:
            lengths.append((key.text, length))
    within = block.text("within", needed=True)
    length = seconds(within)
    if isinstance(length, str):
        block.fault("rules-window", f"Window {name}: {length}.", line=block.line_of("within"))
        length = 0
    drops = block.one_of("beyond", ("weaken", "unknown")) == "unknown"
    return Window(name, length, drops, block.flag("same-encounter"), tuple(lengths))


def _cutoff(name: str, tree: Tree, choice: Choice | None, faults: Faults) -> Cutoff:
    block = Block(tree, f"Cut-off {name}", ("value", "source", "seen", "alternatives", "note"), faults)
    text, source = block.text("value", needed=True), block.text("source", needed=True)
    unit = written_unit(text)
    value = quantity(text, unit)
    if isinstance(value, str):
        block.fault("rules-cutoff", f"Cut-off {name}: {value}.", line=block.line_of("value"))
        return Cutoff(name, quantity_zero(), unit, source, "")
    others = [(value, source)]
    for key, why in block.pairs("alternatives"):
        other = quantity(key.text, unit)
        if isinstance(other, str) or not isinstance(why, Text) or not why.text:
            faults.add(
                key.line, "rules-cutoff", f"Cut-off {name}: an alternative is a value with its source."
            )
        else:
            others.append((other, why.text))
    if choice:
        chosen = quantity(choice.value, unit)
        source = choice.source or next((why for other, why in others if other == chosen), "")
        if isinstance(chosen, str) or not source:
            text = f"Cut-off {name}: choose one of its values, or give value and source."
            faults.add(choice.line, "rules-choice", text, source=choice.file)
        else:
            value = chosen
    rest = tuple((other, why) for other, why in others if other != value)
    return Cutoff(name, value, unit, source, block.one_of("seen", SEEN), rest)


def quantity_zero() -> Decimal:
    """What stands in for a number that could not be read; a book with faults is never used."""
    return Decimal(0)


def _rechecks(block: Block, faults: Faults) -> list[Recheck]:
    tree = block.tree("rechecks")
    if tree is None:
        return []
    if not isinstance(tree, Items):
        block.fault("rules-form", "Rechecks are a list.", line=tree.line)
        return []
    found = []
    for item in tree.items:
        row = Block(item, "A recheck", ("source", "prefix", "cost", "action", "reliability"), faults)
        source = row.text("source")
        if source and source not in set(Source):
            row.fault(
                "rules-unknown-value", f"There is no source {source}.{faults.near(source, list(Source))}"
            )
        cost = row.number("cost", default=1) or 1
        reliability = row.number("reliability", default=5) or 5
        found.append(Recheck(source, row.text("prefix"), cost, row.text("action", needed=True), reliability))
    return found


def choices_of(tree: Tree, faults: Faults) -> dict[str, Choice]:
    """The cut-offs a site file chooses: name -> value and, where it is its own value, source."""
    block = Block(tree, "A site file", (*TOP_KEYS, *SITE_KEYS), faults)
    found = {}
    for key, value in block.pairs("choose"):
        if isinstance(value, Pairs):
            own = Block(value, f"Choice {key.text}", ("value", "source"), faults)
            found[key.text] = Choice(
                own.text("value", needed=True), own.text("source", needed=True), faults.source, key.line
            )
        elif isinstance(value, Text):
            found[key.text] = Choice(value.text, "", faults.source, key.line)
    return found
