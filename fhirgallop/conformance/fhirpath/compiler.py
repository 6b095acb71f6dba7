# ruff: noqa: ARG001, ARG005 - all compiled code has one signature, whether it looks at everything or not
"""Turns the tree of an expression into a closure over collections.

A part that does not depend on the item at hand (`%resource.descendants().reference`) is worked out once: per
resource when it starts at %resource or %rootResource, per evaluation when it starts at %context. Membership
in such a part is looked up in a set. So rules that look a whole resource through stay linear.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from fhirgallop.conformance.fhirpath import converting, fhir, operators, selecting, texts
from fhirgallop.conformance.fhirpath.frame import Code, Frame, Run
from fhirgallop.conformance.fhirpath.function import Function
from fhirgallop.conformance.fhirpath.items import CannotJudge, Collection, Item, key, keys, singleton
from fhirgallop.conformance.fhirpath.model import member
from fhirgallop.conformance.fhirpath.operators import EMPTY
from fhirgallop.conformance.fhirpath.syntax import (
    Binary,
    Call,
    Literal,
    Member,
    Special,
    Tree,
    TypeTest,
    Unary,
    Variable,
)
from fhirgallop.conformance.fhirpath.syntax import (
    Item as Indexed,
)
from fhirgallop.conformance.fhirpath.tokens import ExpressionError

FUNCTIONS: Mapping[str, Function] = {
    **selecting.FUNCTIONS,
    **texts.FUNCTIONS,
    **converting.FUNCTIONS,
    **fhir.FUNCTIONS,
}
_TYPE_FUNCTIONS = ("is", "as", "ofType")
# these ask whether an element is there; a primitive that has only an extension is
_PRESENCE_FUNCTIONS = ("exists", "empty", "count", "hasValue")
_CONSTANTS = {
    "ucum": "http://unitsofmeasure.org",
    "sct": "http://snomed.info/sct",
    "loinc": "http://loinc.org",
}
_ONCE_A_RESOURCE = frozenset(("resource", "rootResource"))
_ONCE_A_RUN = _ONCE_A_RESOURCE | {"context"}


def compile_tree(tree: Tree) -> Code:
    """The closure of a tree.

    Raises:
        ExpressionError: a function has too few or too many arguments.
    """
    variables = _steady(tree)
    code = _compile(tree)
    if not variables or isinstance(tree, Variable):
        return code
    return _kept(code, variables)


def _steady(tree: Tree) -> frozenset[str] | None:
    """The variables a tree starts from, if it depends on nothing else; None if it depends on the item."""
    match tree:
        case Literal():
            return frozenset()
        case Variable(name):
            return frozenset((name,)) if name in _ONCE_A_RUN else frozenset() if name in _CONSTANTS else None
        case Member(base, _):
            return None if base is None else _steady(base)
        case Indexed(base, index):
            return _all_steady(base, index)
        case Unary(_, operand) | TypeTest(_, operand, _):
            return _steady(operand)
        case Binary(_, left, right):
            return _all_steady(left, right)
        case Call(base, name, arguments):
            return _steady_call(base, name, arguments)
        case _:
            return None


def _steady_call(base: Tree | None, name: str, arguments: tuple[Tree, ...]) -> frozenset[str] | None:
    if base is None:
        return None
    if name in _TYPE_FUNCTIONS:
        return _steady(base)
    function = FUNCTIONS.get(name)
    if function is None:
        return None
    if not function.per_item or name == "trace":
        return _all_steady(base, *(arguments if name != "trace" else ()))
    start = _steady(base)
    # arguments run with the items of the base; only what they name beside them matters
    named = [_variables(part) for part in arguments]
    if start is None or any(names is None for names in named):
        return None
    return start.union(*(names for names in named if names is not None))


def _variables(tree: Tree) -> frozenset[str] | None:
    """All variables in a tree; None when `$total` or an unknown variable is among them."""
    match tree:
        case Variable(name):
            return frozenset((name,)) if name in _ONCE_A_RUN else frozenset() if name in _CONSTANTS else None
        case Special(name):
            return None if name == "$total" else frozenset()
        case Literal():
            return frozenset()
        case Member(base, _):
            parts: tuple[Tree | None, ...] = (base,)
        case Indexed(base, index):
            parts = (base, index)
        case Unary(_, operand) | TypeTest(_, operand, _):
            parts = (operand,)
        case Binary(_, left, right):
            parts = (left, right)
        case Call(base, _, arguments):
            parts = (base, *arguments)
    found: frozenset[str] = frozenset()
    for part in parts:
        names = frozenset() if part is None else _variables(part)
        if names is None:
            return None
        found |= names
    return found


def _all_steady(*trees: Tree) -> frozenset[str] | None:
    found: frozenset[str] = frozenset()
    for tree in trees:
        names = _steady(tree)
        if names is None:
            return None
        found |= names
    return found


def _kept(code: Code, variables: frozenset[str]) -> Code:
    """Remembers what the code gives, for the resource or for the run."""
    mark = object()

    def run(focus: Collection, frame: Frame) -> Collection:
        store, place = _store(frame.run, variables, mark)
        known = store.get(place)
        if known is None:
            before, frame.run.incomplete = frame.run.incomplete, False
            known = store[place] = (code(focus, frame), frame.run.incomplete)
            frame.run.incomplete = before
        if known[1]:
            frame.run.incomplete = True
        return known[0]

    return run


def _store(run: Run, variables: frozenset[str], mark: object) -> tuple[dict[Any, Any], Any]:
    if variables <= _ONCE_A_RESOURCE:
        return run.scope.memo, (mark, run.node.resource)
    return run.kept, mark


def _compile(tree: Tree) -> Code:  # noqa: PLR0911 - one return a kind of tree
    match tree:
        case Literal(value):
            constant = EMPTY if value is None else [value]
            return lambda focus, frame: constant
        case Variable(name):
            return _variable(name)
        case Special("$index"):
            return lambda focus, frame: EMPTY if frame.index is None else [frame.index]
        case Special("$total"):
            return lambda focus, frame: EMPTY if frame.total is None else frame.total
        case Special():
            return lambda focus, frame: frame.this
        case Member(base, name):
            return _member(base, name)
        case Indexed(base, index):
            return _indexed(compile_tree(base), compile_tree(index))
        case Unary(operator, operand):
            inner = compile_tree(operand)
            return inner if operator == "+" else lambda focus, frame: operators.negative(inner(focus, frame))
        case Binary():
            return _binary(tree)
        case TypeTest(operator, operand, type_name):
            return _type_test(operator, compile_tree(operand), type_name)
        case Call():
            return _call(tree)


def _variable(name: str) -> Code:
    if name in _CONSTANTS:
        constant: Collection = [_CONSTANTS[name]]
        return lambda focus, frame: constant
    if name == "context":
        return lambda focus, frame: frame.run.context
    if name == "resource":
        return lambda focus, frame: [Item.of(frame.run.node.resource)]
    if name == "rootResource":
        return lambda focus, frame: [Item.of(frame.run.node.root_resource)]
    if name.startswith("vs-"):
        return lambda focus, frame: [f"http://hl7.org/fhir/ValueSet/{name[3:]}"]
    if name.startswith("ext-"):
        return lambda focus, frame: [f"http://hl7.org/fhir/StructureDefinition/{name[4:]}"]

    def unknown(focus: Collection, frame: Frame) -> Collection:
        raise CannotJudge("the rule uses a variable that is not known here")

    return unknown


def _member(base: Tree | None, name: str, *, reads_value: bool = True) -> Code:
    """The parts of that name; `reads_value` is False where only their presence is asked for."""
    if base is None:
        may_be_type = name[:1].isupper()

        def start(focus: Collection, frame: Frame) -> Collection:
            model = frame.run.model
            if may_be_type and focus and isinstance(focus[0], Item) and model.is_a(focus[0].type_name, name):
                return focus  # `Patient.name` at a Patient
            return _members(focus, name, frame.run, reads_value)

        return start
    source = compile_tree(base)
    return lambda focus, frame: _members(source(focus, frame), name, frame.run, reads_value)


def _members(items: Collection, name: str, run: Run, reads_value: bool) -> Collection:
    found: Collection = []
    model = run.model
    for item in items:
        if isinstance(item, Item):
            if item.reference:
                raise CannotJudge("the rule looks into the target of a reference that is not at hand")
            if not member(item, name, model, found):
                run.incomplete = True
    if reads_value and not run.incomplete:
        run.incomplete = any(item.value is None for item in found)
    return found


def _indexed(base: Code, index: Code) -> Code:
    def run(focus: Collection, frame: Frame) -> Collection:
        items = base(focus, frame)
        place = singleton(index(focus, frame))
        if isinstance(place, bool) or not isinstance(place, int) or place < 0:
            return EMPTY
        return items[place : place + 1]

    return run


def _binary(tree: Binary) -> Code:
    if tree.operator in ("in", "contains"):
        few, many = (tree.left, tree.right) if tree.operator == "in" else (tree.right, tree.left)
        variables = _steady(many)
        if variables:
            return _lookup(compile_tree(few), compile_tree(many), variables)
    left, right = compile_tree(tree.left), compile_tree(tree.right)
    logic = operators.LOGIC.get(tree.operator)
    if logic is not None:
        return logic(left, right)
    work = operators.STRICT[tree.operator]
    return lambda focus, frame: work(left(focus, frame), right(focus, frame))


def _lookup(few: Code, many: Code, variables: frozenset[str]) -> Code:
    """`few in many` where `many` stays the same: its keys are kept as a set."""
    mark = object()

    def run(focus: Collection, frame: Frame) -> Collection:
        item = few(focus, frame)
        items = many(focus, frame)
        if len(item) != 1:
            return operators.contained(item, items)
        store, place = _store(frame.run, variables, mark)
        known = store.get(place)
        if known is None:
            known = store[place] = keys(items)
        return operators.boolean(key(item[0]) in known)

    return run


def _type_test(operator: str, operand: Code, name: str) -> Code:
    if operator == "is":

        def test(focus: Collection, frame: Frame) -> Collection:
            items = operand(focus, frame)
            if len(items) > 1:
                raise CannotJudge("several values stand where `is` can take only one")
            return operators.boolean(operators.is_type(items[0], name, frame)) if items else EMPTY

        return test
    # `as` on many items filters them, as FHIR's own rules use it
    return lambda focus, frame: [i for i in operand(focus, frame) if operators.is_type(i, name, frame)]


def _call(tree: Call) -> Code:
    if isinstance(tree.base, Member) and tree.name in _PRESENCE_FUNCTIONS and not tree.arguments:
        base = _member(tree.base.base, tree.base.name, reads_value=False)
    else:
        base = _focus if tree.base is None else compile_tree(tree.base)
    if tree.name in _TYPE_FUNCTIONS:
        if len(tree.arguments) != 1:
            raise ExpressionError(f"{tree.name} takes one type")
        return _type_test("is" if tree.name == "is" else "as", base, _type_of(tree.arguments[0]))
    function = FUNCTIONS.get(tree.name)
    if function is None:
        name = tree.name[:40]

        def unknown(focus: Collection, frame: Frame) -> Collection:
            raise CannotJudge(f"the function {name} of the rule is not known here")

        return unknown
    if not function.least <= len(tree.arguments) <= function.most:
        raise ExpressionError(f"{tree.name} is given {len(tree.arguments)} arguments")
    body = function.body
    arguments = tuple(compile_tree(argument) for argument in tree.arguments)
    return lambda focus, frame: body(base(focus, frame), frame, arguments)


def _focus(focus: Collection, frame: Frame) -> Collection:
    return focus


def _type_of(tree: Tree) -> str:
    match tree:
        case Member(None, name):
            return name
        case Member(Member(None, namespace), name):
            return f"{namespace}.{name}"
        case Literal(str(name)):
            return name
    raise ExpressionError("a type's name is missing")
