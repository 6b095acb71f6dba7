"""Changes to the text of a template map that leave everything else in it as it stands, remarks included.

Only the lines of the entry that is changed are written anew, and within it only what differs; so a map may be
edited by hand and through forms in turn.
"""

from __future__ import annotations

import io
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Final

from ruamel.yaml import YAML
from ruamel.yaml.comments import CommentedMap
from ruamel.yaml.error import YAMLError
from ruamel.yaml.scalarstring import DoubleQuotedScalarString

from fhirgallop.errors import MapError
from fhirgallop.mapping.document import Items, Node, Pairs, Scalar, parse
from fhirgallop.mapping.faults import Faults
from fhirgallop.mapping.grammar import FORMAT_VERSION, MAP
from fhirgallop.outcome import Issue

_WIDTH: Final = 4096  # nothing is folded: a person decides where lines end
# words that other readers of YAML take for something else than text
_QUOTED: Final = frozenset({"yes", "no", "on", "off", "true", "false", "y", "n", "null", "~", ""})


@dataclass(frozen=True, slots=True)
class Block:
    """An entry of a list in the text: `value` is what its lines `[first, end)`, counted from 0, say."""

    first: int
    end: int
    indent: int
    value: dict[str, Any]


def new_map(name: str, title: str) -> str:
    """The text of a map that reads nothing yet; it has faults until the record's parts are told."""
    return (
        f"template-map: {FORMAT_VERSION}\nname: {_scalar(name)}\nversion: {_scalar('1')}\n"
        f"title: {_scalar(title)}\n\nrecord: {{}}\n\nlines:\n"
    )


def entries(text: str, key: str = "lines") -> list[Block]:
    """The entries of the list `lines` or `ignore`, in their order.

    Raises:
        MapError: the text cannot be read, or the list is written within brackets.
    """
    rows = text.splitlines()
    node = _root(text).get(key)
    if node is None or (isinstance(node, Scalar) and node.is_empty):
        return []
    if not isinstance(node, Items):
        raise _fault(node.line, f"{key} is no list; mend the text first.")
    starts = [item.line - 1 for item in node.items]
    if len(set(starts)) != len(starts) or any(not rows[at].lstrip().startswith("-") for at in starts):
        raise _fault(node.line, f"The list {key} is written within brackets; write an entry a line, with -.")
    last = _block(text, key)[1]
    ends = [_trimmed(rows, start, end) for start, end in zip(starts, [*starts[1:], last], strict=True)]
    return [
        Block(start, end, len(rows[start]) - len(rows[start].lstrip()), _plain(item))
        for start, end, item in zip(starts, ends, node.items, strict=True)
    ]


def part(text: str, key: str) -> Any:
    """A key of the map as texts, lists and dictionaries; None where it is not there, or empty.

    Raises:
        MapError: the text cannot be read.
    """
    node = _root(text).get(key)
    return None if node is None else _plain(node)


def put_entry(text: str, value: Mapping[str, Any], at: int | None = None, key: str = "lines") -> str:
    """The text with an entry of a list changed, or added at its end where `at` is None.

    Raises:
        MapError: the text cannot be read.
        IndexError: there is no such entry.
    """
    found = entries(text, key)
    if at is None and all(name.text != key for name, _ in _root(text).items):
        text = f"{text.rstrip()}\n\n{key}:\n"
    rows = text.splitlines()
    if at is not None:
        block = found[at]
        if _as_text(block.value) == _as_text(value):
            return text
        return _joined([*rows[: block.first], *_changed(rows, block, value), *rows[block.end :]])
    place, indent = _place_for_new(text, key, found)
    return _joined([*rows[:place], *_item(_written(value), indent), *rows[place:]])


def drop_entry(text: str, at: int, key: str = "lines") -> str:
    """The text without one entry of a list."""
    block = entries(text, key)[at]
    rows = text.splitlines()
    return _joined([*rows[: block.first], *rows[block.end :]])


def put_part(text: str, key: str, value: Any, within: str = "") -> str:
    """The text with a key of the map itself (`within=""`), or of a group such as `record`, set anew."""
    rows = text.splitlines()
    if not within:
        return _joined(_key_set(rows, text, key, value))
    group = _root(text).get(within)
    held: dict[str, Any] = _plain(group) if isinstance(group, Pairs) else {}
    held[key] = value
    if value is None:
        del held[key]
    return _joined(_key_set(rows, text, within, held))


def _key_set(rows: list[str], text: str, key: str, value: Any) -> list[str]:
    if _root(text).get(key) is None and not any(name.text == key for name, _ in _root(text).items):
        order = [one.name for one in MAP.keys]
        before = order[: order.index(key)]
        ends = [_block(text, name.text)[1] for name, _ in _root(text).items if name.text in before]
        first = end = max(ends, default=len(rows))
        old: CommentedMap = CommentedMap()
    else:
        first, end = _block(text, key)
        end = _trimmed(rows, first, end)
        old = _loaded("\n".join(rows[first:end]) + "\n")
    if isinstance(value, Mapping) and isinstance(old.get(key), CommentedMap) and old[key]:
        _merge(old[key], value)
    else:
        old[key] = _quoted(value)
    return [*rows[:first], *_dumped(old).splitlines(), *rows[end:]]


def _changed(rows: list[str], block: Block, value: Mapping[str, Any]) -> list[str]:
    """An entry's lines with what differs merged in, so that its remarks stay."""
    lines = rows[block.first : block.end]
    body = [lines[0].replace("-", " ", 1), *lines[1:]]
    inner = min(len(line) - len(line.lstrip()) for line in body if line.strip() and line.lstrip()[0] != "#")
    held = _loaded("\n".join(line[inner:] if line.strip() else "" for line in body) + "\n")
    _merge(held, value)
    return _item(_dumped(held), block.indent)


def _item(written: str, indent: int) -> list[str]:
    lines = written.rstrip("\n").splitlines()
    first, *rest = lines or ["{}"]
    pad = " " * indent
    return [f"{pad}- {first}", *(f"{pad}  {line}" if line else "" for line in rest)]


def _merge(old: CommentedMap, new: Mapping[str, Any]) -> None:
    for key in [key for key in old if str(key) not in new]:
        del old[key]
    names = {str(key): key for key in old}
    for key, value in new.items():
        mine = names.get(key, _quoted(key))
        held = old.get(mine)
        if isinstance(held, CommentedMap) and isinstance(value, Mapping):
            _merge(held, value)
        elif mine not in old or _as_text(held) != _as_text(value):
            old[mine] = _quoted(value)


def _as_text(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {str(key): _as_text(one) for key, one in value.items()}
    if isinstance(value, list):
        return [_as_text(one) for one in value]
    return str(value).lower() if isinstance(value, bool) else "" if value is None else str(value)


def _quoted(value: Any) -> Any:
    """Text that other readers might misread, between double quotes."""
    if isinstance(value, Mapping):
        made = CommentedMap((_quoted(key), _quoted(one)) for key, one in value.items())
        if all(not isinstance(one, (Mapping, list)) for one in value.values()) and len(str(value)) < 70:
            made.fa.set_flow_style()
        return made
    if isinstance(value, list):
        return [_quoted(one) for one in value]
    if isinstance(value, str) and (value.lower() in _QUOTED or not value[:1].isalpha()):
        return DoubleQuotedScalarString(value)
    return value


def _yaml() -> YAML:
    yaml = YAML()
    yaml.preserve_quotes = True
    yaml.width = _WIDTH
    yaml.indent(mapping=2, sequence=4, offset=2)
    return yaml


def _loaded(text: str) -> CommentedMap:
    try:
        found = _yaml().load(text)
    except (YAMLError, ValueError):
        raise _fault(0, "This entry is written in a way that forms cannot change; change its text.") from None
    return found if isinstance(found, CommentedMap) else CommentedMap()


def _dumped(value: CommentedMap) -> str:
    out = io.StringIO()
    _yaml().dump(value, out)
    return out.getvalue()


def _written(value: Mapping[str, Any]) -> str:
    made = CommentedMap((_quoted(key), _quoted(one)) for key, one in value.items())
    return _dumped(made)


def _scalar(value: str) -> str:
    return _dumped(CommentedMap({"x": DoubleQuotedScalarString(value)}))[3:].rstrip("\n")


def _root(text: str) -> Pairs:
    faults = Faults("")
    node = parse(text, faults)
    if not isinstance(node, Pairs):
        raise MapError("map", faults.issues or [_issue(1, "The map is no group of keys.")])
    return node


def _block(text: str, key: str) -> tuple[int, int]:
    """The lines of a key of the map, up to the next key or the end."""
    root = _root(text)
    starts = sorted(name.line - 1 for name, _ in root.items)
    first = next(name.line - 1 for name, _ in root.items if name.text == key)
    later = [start for start in starts if start > first]
    return first, later[0] if later else len(text.splitlines())


def _trimmed(rows: list[str], first: int, end: int) -> int:
    """The end of a block without the blank lines and remarks before what comes next."""
    while end > first + 1 and (not rows[end - 1].strip() or rows[end - 1].lstrip().startswith("#")):
        end -= 1
    return end


def _place_for_new(text: str, key: str, found: list[Block]) -> tuple[int, int]:
    if found:
        return found[-1].end, found[-1].indent
    return _block(text, key)[0] + 1, 2


def _plain(node: Node) -> Any:
    """A node as texts, lists and dictionaries."""
    if isinstance(node, Scalar):
        return None if node.is_empty else node.text
    if isinstance(node, Items):
        return [_plain(item) for item in node.items]
    return {name.text: _plain(value) for name, value in node.items}


def _joined(rows: list[str]) -> str:
    return "\n".join(rows) + "\n"


def _fault(line: int, text: str) -> MapError:
    return MapError("map", [_issue(line, text)])


def _issue(line: int, text: str) -> Issue:
    return Issue("error", "structure", "map-not-editable", text, line=line)
