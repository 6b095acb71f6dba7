# ruff: noqa: ARG001, ARG005 - all compiled code has one signature, whether it looks at everything or not
"""Functions on collections: existence, filtering, subsetting, combining, aggregates.

Source: FHIRPath N1 (v2.0.0), sections 5.1 to 5.4, 6.3 and 7.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from typing import Any

from fhirgallop.conformance.fhirpath.frame import Code, Frame, argument
from fhirgallop.conformance.fhirpath.function import Function, integer_argument
from fhirgallop.conformance.fhirpath.items import (
    CannotJudge,
    Collection,
    Item,
    key,
    keys,
    order,
    plain,
    singleton,
    truth,
)
from fhirgallop.conformance.fhirpath.model import children
from fhirgallop.conformance.fhirpath.operators import EMPTY, FALSE, TRUE, boolean, distinct, union
from fhirgallop.conformance.fhirpath.operators import arithmetic as reckon

Arguments = Sequence[Code]


def each(focus: Collection, frame: Frame, code: Code) -> Iterator[tuple[Any, Collection]]:
    """Each item with what the code gives for it."""
    run = frame.run
    run.spend(len(focus))
    for index, item in enumerate(focus):
        this = [item]
        yield item, code(this, Frame(run, this, index, frame.total))


def _where(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    return [item for item, result in each(focus, frame, args[0]) if truth(result) is True]


def _exists(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    if args:
        return boolean(any(truth(result) is True for _, result in each(focus, frame, args[0])))
    return TRUE if focus else FALSE


def _all(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    return boolean(all(truth(result) is True for _, result in each(focus, frame, args[0])))


def _select(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    return [part for _, result in each(focus, frame, args[0]) for part in result]


def _repeat(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    found: dict[Any, Any] = {}
    wave = focus
    while wave:
        fresh = []
        for _, result in each(wave, frame, args[0]):
            for part in result:
                mark = key(part)
                if mark not in found:
                    found[mark] = part
                    fresh.append(part)
        wave = fresh
    return list(found.values())


def _not(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    value = truth(focus)
    return EMPTY if value is None else boolean(not value)


def _every(wanted: bool) -> Callable[[Collection, Frame, Arguments], Collection]:
    return lambda focus, frame, args: boolean(all(plain(item) is wanted for item in focus))


def _some(wanted: bool) -> Callable[[Collection, Frame, Arguments], Collection]:
    return lambda focus, frame, args: boolean(any(plain(item) is wanted for item in focus))


def _subset_of(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    return boolean(keys(focus) <= keys(argument(args[0], frame)))


def _superset_of(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    return boolean(keys(focus) >= keys(argument(args[0], frame)))


def _is_distinct(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    return boolean(len(keys(focus)) == len(focus))


def _single(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    if len(focus) > 1:
        raise CannotJudge("`single` was given several values")
    return focus


def _skip(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    number = integer_argument(args[0], frame)
    return EMPTY if number is None else focus[max(0, number) :]


def _take(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    number = integer_argument(args[0], frame)
    return EMPTY if number is None else focus[: max(0, number)]


def _intersect(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    others = keys(argument(args[0], frame))
    return distinct([item for item in focus if key(item) in others])


def _exclude(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    others = keys(argument(args[0], frame))
    return [item for item in focus if key(item) not in others]


def _iif(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    inner = Frame(frame.run, focus, frame.index, frame.total)
    if truth(args[0](focus, inner)) is True:
        return args[1](focus, inner)
    return args[2](focus, inner) if len(args) > 2 else EMPTY


def _aggregate(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    total = argument(args[1], frame) if len(args) > 1 else EMPTY
    run = frame.run
    run.spend(len(focus))
    for index, item in enumerate(focus):
        this = [item]
        total = args[0](this, Frame(run, this, index, total))
    return total


def _children(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    model = frame.run.model
    found = [part for item in focus if isinstance(item, Item) for part in children(item, model)]
    frame.run.spend(len(found))
    return found


def _descendants(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    found: Collection = []
    stack = _children(focus, frame, args)[::-1]
    model = frame.run.model
    while stack:
        item = stack.pop()
        found.append(item)
        stack.extend(list(children(item, model))[::-1])
    frame.run.spend(len(found))
    return found


def _trace(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    return focus  # a log of the data is not wanted


def _sum(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    total: Collection = focus[:1]
    for item in focus[1:]:
        total = reckon("+", singleton(total), plain(item))
    return total


def _extreme(sign: int) -> Callable[[Collection, Frame, Arguments], Collection]:
    def run(focus: Collection, frame: Frame, args: Arguments) -> Collection:
        best: Collection = focus[:1]
        for item in focus[1:]:
            verdict = order(item, best[0])
            if verdict is None:
                return EMPTY
            if verdict == sign:
                best = [item]
        return best

    return run


def _average(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    total = singleton(_sum(focus, frame, args))
    return EMPTY if total is None else reckon("/", total, len(focus))


FUNCTIONS: Mapping[str, Function] = {
    "empty": Function(lambda focus, frame, args: FALSE if focus else TRUE),
    "exists": Function(_exists, 0, 1, per_item=True),
    "all": Function(_all, 1, 1, per_item=True),
    "allTrue": Function(_every(True)),
    "anyTrue": Function(_some(True)),
    "allFalse": Function(_every(False)),
    "anyFalse": Function(_some(False)),
    "subsetOf": Function(_subset_of, 1, 1),
    "supersetOf": Function(_superset_of, 1, 1),
    "count": Function(lambda focus, frame, args: [len(focus)]),
    "distinct": Function(lambda focus, frame, args: distinct(focus)),
    "isDistinct": Function(_is_distinct),
    "not": Function(_not),
    "where": Function(_where, 1, 1, per_item=True),
    "select": Function(_select, 1, 1, per_item=True),
    "repeat": Function(_repeat, 1, 1, per_item=True),
    "single": Function(_single),
    "first": Function(lambda focus, frame, args: focus[:1]),
    "last": Function(lambda focus, frame, args: focus[-1:]),
    "tail": Function(lambda focus, frame, args: focus[1:]),
    "skip": Function(_skip, 1, 1),
    "take": Function(_take, 1, 1),
    "intersect": Function(_intersect, 1, 1),
    "exclude": Function(_exclude, 1, 1),
    "union": Function(lambda focus, frame, args: union(focus, argument(args[0], frame)), 1, 1),
    "combine": Function(lambda focus, frame, args: [*focus, *argument(args[0], frame)], 1, 1),
    "iif": Function(_iif, 2, 3, per_item=True),
    "aggregate": Function(_aggregate, 1, 2, per_item=True),
    "sum": Function(_sum),
    "min": Function(_extreme(-1)),
    "max": Function(_extreme(1)),
    "avg": Function(_average),
    "children": Function(_children),
    "descendants": Function(_descendants),
    "trace": Function(_trace, 1, 2, per_item=True),
}
