"""Reads a template map from its text: every fault at once, each with its line and a cure."""

from __future__ import annotations

from pathlib import Path
from typing import Final

from fhirgallop.codes import units
from fhirgallop.errors import MapError
from fhirgallop.exam import catalogue as shipped
from fhirgallop.exam.catalogue import Catalogue
from fhirgallop.mapping import consistency
from fhirgallop.mapping.document import MAX_BYTES, Items, Node, Pairs, parse
from fhirgallop.mapping.faults import Faults
from fhirgallop.mapping.grammar import MAP
from fhirgallop.mapping.line_part import LineReader, Section, condition
from fhirgallop.mapping.record_part import record_part, text, texts
from fhirgallop.mapping.structure import conforming
from fhirgallop.mapping.template_map import Ignored, Line, TemplateMap
from fhirgallop.outcome import Issue, has_errors

_MAX_LINES: Final = 2000


def read_map(
    text: str | bytes, *, name: str = "", catalogue: Catalogue | None = None
) -> tuple[TemplateMap | None, list[Issue]]:
    """The map written in `text` and everything that is wrong with it.

    Args:
        text: YAML 1.2, UTF-8.
        name: file name, for messages.
        catalogue: findings that lines may name; the shipped ones where left out.

    Returns:
        The map, or None when an issue is an error; and the issues, in the order of the text.
    """
    faults = Faults(name)
    template = _read(text, catalogue or shipped.load(), faults)
    issues = sorted(faults.issues, key=lambda issue: (issue.line, issue.column))
    return (None if has_errors(issues) else template), issues


def load_map(path: Path | str, *, catalogue: Catalogue | None = None) -> TemplateMap:
    """The map in a file.

    Raises:
        MapError: the file cannot be read or the map has faults; it carries all of them.
    """
    path = Path(path)
    try:
        with path.open("rb") as file:
            written = file.read(MAX_BYTES + 1)
    except OSError as error:
        reason = f"The file cannot be opened ({error.strerror}); check its name and place."
        raise MapError(
            str(path), [Issue("fatal", "not-found", "map-file", reason, source=str(path))]
        ) from error
    template, issues = read_map(written, name=str(path), catalogue=catalogue)
    if template is None:
        raise MapError(str(path), issues)
    return template


def _read(written: str | bytes, catalogue: Catalogue, faults: Faults) -> TemplateMap | None:
    tree = parse(written, faults)
    if tree is None:
        if not faults.issues:
            faults.add(1, "map-empty", "The map is empty; start it with template-map: 1.")
        return None
    root = conforming(tree, MAP, "the map", faults)
    if not isinstance(root, Pairs):
        return None
    record = record_part(root.get("record"), faults)
    lines = _lines(root, catalogue, faults)
    if record is None:
        return None
    template = TemplateMap(
        name=text(root, "name"),
        version=text(root, "version"),
        title=text(root, "title"),
        record=record,
        lines=lines,
        ignored=_ignored(root.get("ignore"), faults),
        blanks=texts(root.get("blanks")),
        unknown_values=text(root, "unknown-values", "refuse"),  # type: ignore[arg-type]
        local_system=text(root, "local-system"),
    )
    consistency.check(template, faults)
    return template


def _lines(root: Pairs, catalogue: Catalogue, faults: Faults) -> tuple[Line, ...]:
    sections = {}
    declared = root.get("sections")
    for key, group in declared.items if isinstance(declared, Pairs) else ():
        if isinstance(group, Pairs):
            means = text(group, "blank-means") or None
            sections[key.text] = Section(means, condition(group.get("when"), faults))  # type: ignore[arg-type]
    reader = LineReader(
        catalogue,
        units.table(),
        faults,
        sections=sections,
        blank_means=text(root, "blank-means", "not-recorded"),  # type: ignore[arg-type]
    )
    nodes = root.get("lines")
    items = nodes.items if isinstance(nodes, Items) else ()
    if len(items) > _MAX_LINES:
        faults.add(
            items[_MAX_LINES].line,
            "map-too-large",
            f"A map has at most {_MAX_LINES} lines; split the form.",
            code="too-long",
        )
    return tuple(
        line for item in items[:_MAX_LINES] if isinstance(item, Pairs) if (line := reader.line(item))
    )


def _ignored(node: Node | None, faults: Faults) -> tuple[Ignored, ...]:
    found = []
    for item in node.items if isinstance(node, Items) else ():
        if not isinstance(item, Pairs):
            continue
        field, pattern = text(item, "field"), text(item, "fields")
        if bool(field) == bool(pattern):
            words = "An entry of ignore names either one field, or fields by a pattern with *."
            faults.add(item.line, "map-contradictory-keys", words)
        elif "*" in field:
            faults.add(
                item.line,
                "map-form",
                "A pattern with * is written below fields, not below field.",
                code="value",
            )
        else:
            found.append(Ignored(field or pattern, text(item, "reason"), item.line))
    return tuple(found)
