"""The order of a judgement: read, fast pass, else the walk through all clauses, then places in the text."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

from fhirgallop.conformance import fast, references, source, structure, walk
from fhirgallop.conformance.editions import Edition
from fhirgallop.conformance.node import Node
from fhirgallop.conformance.registry import Registry, registry
from fhirgallop.conformance.scan import Path as JsonPath
from fhirgallop.conformance.source import Source
from fhirgallop.outcome import Issue, ordered

_STEP = re.compile(r"`?(\w+)`?(?:\.ofType\((\w+)\))?(?:\[(\d+)\])?(?:\.|$)", re.ASCII)


def validate(
    resource: bytes | str | Mapping[str, Any],
    edition: str = "R4",
    profiles: Sequence[str] = (),
    packages: Sequence[Path | str] = (),
) -> list[Issue]:
    """Everything that is wrong with a resource by the base specification and its profiles.

    Args:
        resource: JSON as bytes or text, or the parsed object.
        edition: "R4" (4.0.1), "R4B" (4.3.0) or "R5" (5.0.0).
        profiles: canonicals the resource must meet beside those in its meta.profile.
        packages: further FHIR packages (.tgz) with profiles, extensions and value sets.

    Returns:
        Issues, most severe first; empty when nothing is wrong. Nothing a resource holds is raised.

    Raises:
        ValueError: no such edition.
        PackageError: a package is broken.
    """
    known = registry(edition, tuple(map(Path, packages))) if packages else registry(edition)
    if type(resource) is dict and not profiles:  # nothing has to be read first
        settled = fast.settle(resource, known)
        if settled is not None:
            return ordered(settled) if settled else settled
    read = source.read(resource)
    value, text, proved, same, _ = read
    if proved and text is not None and not profiles:
        settled = fast.settle(value, known, text, same=same)
        if settled is not None:
            return ordered(settled) if settled else settled
    return thorough(read, known, profiles)


def thorough(read: Source, known: Registry, profiles: Sequence[str] = ()) -> list[Issue]:
    """The pass that says what is wrong and where; `validate` takes it when the fast pass cannot accept."""
    text = read.text
    if text is not None and not read.issues:
        read = source.exact(text)
    issues = list(read.issues)
    if any(issue.severity == "fatal" for issue in issues):
        return ordered(issues)
    if isinstance(read.value, Mapping) and source.deeper_than_limit(read.value):
        return ordered([*issues, source.too_deep()])
    root = structure.root(read.value, known.edition, issues)
    if root is None:
        return ordered(issues)
    if text is not None:
        issues = [
            *(
                placed
                for issue in dict.fromkeys(issues)
                for placed in _of_text(issue, text, root, known.edition)
            ),
            *_repeated(text, root, known.edition),
        ]
    issues.extend(walk.judge(root, known, references.scope_of(root, known.edition), profiles))
    if text is not None:
        return ordered(_placed(issues, text, root))
    return ordered(issues)


def _of_text(issue: Issue, text: bytes, root: Node, edition: Edition) -> Iterator[Issue]:
    """An issue of the text itself, at each value that gives it, or at the root."""
    places = source.odd(text, issue.rule) if issue.rule in ("json-number", "json-surrogate") else []
    for path, line, column in places:
        yield replace(issue, expression=_expression(path, root, edition), line=line, column=column)
    if not places:
        yield replace(issue, expression=root.expression)


def _repeated(text: bytes, root: Node, edition: Edition) -> Iterator[Issue]:
    for path, line, column in source.duplicates(text):
        said = "The same key stands twice in this object; readers would take different ones. Keep one."
        at = _expression(path, root, edition)
        yield Issue("error", "structure", "json-duplicate-key", said, expression=at, line=line, column=column)


def _expression(path: JsonPath, root: Node, edition: Edition) -> str:
    """FHIRPath of the nearest node that stands at or above a path of JSON keys."""
    node = root
    key = ""
    for step in path:
        if isinstance(step, str):
            key = step
            held: Any = node.value.get(step) if isinstance(node.value, Mapping) else None
            index = None
        else:
            index = step
            held = held[step] if isinstance(held, list) and step < len(held) else None
        place = edition.child(node.type_name, key)
        if isinstance(held, list) and place is not None and place.element.many:
            continue
        if place is not None and place.primitive and not isinstance(held, Mapping | list):
            return node.child(held, None, place, key, index).expression
        if place is None or not isinstance(held, Mapping):
            break
        child = node.child(held, None, place, key, index)
        if child.type_name == "Resource" and held.get("resourceType") in edition.resources:
            child.as_resource(held["resourceType"])
        node = child
    return node.expression


def _placed(issues: Sequence[Issue], text: bytes, root: Node) -> Iterator[Issue]:
    """The issues with line and column of the node that each means."""
    paths = {issue.expression: _path(issue.expression, root.value) for issue in issues if not issue.line}
    places = source.locate(text, paths.values()) if paths else {}
    for issue in issues:
        if issue.line or issue.expression not in paths:
            yield issue
            continue
        line, column = places.get(paths[issue.expression], (0, 0))
        yield replace(issue, line=line, column=column)


def _path(expression: str, value: Any) -> JsonPath:
    """JSON keys and indices of a FHIRPath made by `Node.expression`."""
    path: list[str | int] = []
    _, _, rest = expression.partition(".")
    steps = _STEP.findall(rest)
    for number, (name, kind, index) in enumerate(steps, 1):
        if not isinstance(value, Mapping):
            break
        key = name + (kind[:1].upper() + kind[1:])
        place = int(index) if index else None
        held = _item(value.get(key), place)
        # a primitive that has only extensions stands under its companion key, and so do its extensions
        if not isinstance(held, Mapping | list) and (held is None or number < len(steps)):
            beside = _item(value.get("_" + key), place)
            key, held = ("_" + key, beside) if beside is not None else (key, held)
        path += [key] if place is None else [key, place]
        value = held
    return tuple(path)


def _item(held: Any, index: int | None) -> Any:
    """What is held, or the item of that index; None when there is none."""
    if index is None:
        return held
    return held[index] if isinstance(held, list) and index < len(held) else None
