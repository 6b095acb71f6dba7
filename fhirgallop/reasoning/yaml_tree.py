"""YAML text as a tree whose every part knows its line; scalars stay the text that was written.

Source: YAML 1.2.2, without anchors, aliases and tags.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

from ruamel.yaml import YAML
from ruamel.yaml.error import MarkedYAMLError, YAMLError
from ruamel.yaml.nodes import MappingNode, ScalarNode, SequenceNode

from fhirgallop.reasoning.faults import Faults

MAX_CHARACTERS: Final = 2_000_000
MAX_DEPTH: Final = 24


@dataclass(frozen=True, slots=True)
class Text:
    """A single text."""

    text: str
    line: int


@dataclass(frozen=True, slots=True)
class Items:
    """A list."""

    items: tuple[Tree, ...]
    line: int


@dataclass(frozen=True, slots=True)
class Pairs:
    """Keys with values, in the order written."""

    items: tuple[tuple[Text, Tree], ...]
    line: int


Tree = Text | Items | Pairs


def parse(text: str, faults: Faults) -> Tree | None:
    """The tree, or None when it cannot be read; what is wrong goes into `faults`."""
    if len(text) > MAX_CHARACTERS:
        faults.add(0, "rules-too-large", f"A rule file has at most {MAX_CHARACTERS:,} characters; split it.")
        return None
    try:
        node = YAML(typ="safe", pure=True).compose(text)
    except MarkedYAMLError as error:
        mark = error.problem_mark or error.context_mark
        faults.add(mark.line + 1 if mark else 0, "rules-yaml", f"This is not readable YAML: {error.problem}. "
                   "Look at the indentation, and put a text with a colon between double quotes.")  # fmt: skip
        return None
    except (YAMLError, ValueError, RecursionError, AttributeError, AssertionError, IndexError):
        faults.add(0, "rules-yaml", "The text cannot be read as YAML.")
        return None
    return None if node is None else _tree(node, faults, 0)


def _tree(node: Any, faults: Faults, depth: int) -> Tree:
    line = node.start_mark.line + 1
    if node.anchor is not None or depth > MAX_DEPTH:
        faults.add(line, "rules-yaml", "Anchors, aliases and very deep nesting are not used in rule files.")
        return Text("", line)
    if isinstance(node, ScalarNode):
        return Text("" if node.value == "~" and node.style is None else node.value, line)
    if isinstance(node, SequenceNode):
        return Items(tuple(_tree(child, faults, depth + 1) for child in node.value), line)
    if not isinstance(node, MappingNode):
        faults.add(line, "rules-yaml", "This kind of entry is not used in rule files.")
        return Text("", line)
    pairs: dict[str, tuple[Text, Tree]] = {}
    for key, value in node.value:
        name = str(key.value) if isinstance(key, ScalarNode) else ""
        where = key.start_mark.line + 1
        if name in pairs:
            faults.add(where, "rules-duplicate-key", f"{name} stands twice in one group; keep one.")
        pairs[name] = (Text(name, where), _tree(value, faults, depth + 1))
    return Pairs(tuple(pairs.values()), line)


def dump(tree: Tree) -> Any:
    """The tree as JSON values, for the compiled file."""
    if isinstance(tree, Text):
        return [tree.line, tree.text]
    if isinstance(tree, Items):
        return [tree.line, [dump(child) for child in tree.items], 0]
    return [tree.line, [[key.line, key.text, dump(value)] for key, value in tree.items], 1]


def undump(value: Any) -> Tree:
    """The tree that `dump` wrote."""
    if len(value) == 2:
        return Text(value[1], value[0])
    if value[2] == 0:
        return Items(tuple(undump(child) for child in value[1]), value[0])
    return Pairs(tuple((Text(name, line), undump(child)) for line, name, child in value[1]), value[0])
