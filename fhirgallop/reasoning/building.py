"""Builds conditions from the trees of rule files, and refuses what cannot be asked."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Final

from fhirgallop.exam import catalogue
from fhirgallop.exam.context import Source
from fhirgallop.reasoning.atoms import STUDY, Atom, Bound, Having, OfSubject
from fhirgallop.reasoning.block import Block, quantity
from fhirgallop.reasoning.conditions import All, Any, Condition, Count, First, Not
from fhirgallop.reasoning.defining import Vocabulary
from fhirgallop.reasoning.faults import Faults
from fhirgallop.reasoning.measuring import MEASURED_KEYS, computed, judged
from fhirgallop.reasoning.vocabulary import Cutoff, Kind, Window, kinds
from fhirgallop.reasoning.yaml_tree import Items, Pairs, Text, Tree

BOUNDS: Final = ("at-least", "above", "at-most", "below")
_ATOM_KEYS: Final = ("fact", "is", "answer", "against", *BOUNDS, "with", "from", "window", "matching")
_WANTS: Final = ("present", "absent", "ever", "recorded")
_NEVER: Final = Any(())


class Builder:
    """Builds conditions with one vocabulary; every named condition is built once."""

    def __init__(self, words: Vocabulary, faults: Faults) -> None:
        self.words = words
        self.faults = faults
        self._named: dict[str, Condition] = {}
        self._open: list[str] = []
        self._atoms: dict[tuple[object, ...], Atom] = {}

    def all_named(self) -> None:
        """Builds every named condition, so that faults in unused ones are found too."""
        for name, (tree, _) in self.words.conditions.items():
            self._use(name, tree.line)

    def condition(self, tree: Tree | None) -> Condition:
        """The condition written in `tree`; when it is faulty, one that never holds."""
        if not isinstance(tree, Pairs):
            line = tree.line if tree is not None else 0
            self.faults.add(line, "rules-condition", "A condition is written as {fact: ...}, {all: [...]}, "
                            "{any: [...]}, {not: ...} or {use: ...}.")  # fmt: skip
            return _NEVER
        keys = {key.text for key, _ in tree.items}
        if "fact" in keys:
            return self.atom(tree)
        if "judge" in keys or "compute" in keys:
            block = Block(tree, "A condition", MEASURED_KEYS, self.faults)
            bounds = self._bounds(block, None)
            return judged(block, self.words) if "judge" in keys else computed(block, bounds, self.words)
        if "count" in keys:
            return self._count(tree)
        if "entry" in keys:
            block = Block(tree, "A condition", ("entry", "with"), self.faults)
            block.one_of("entry", ("subject",))
            return OfSubject(self._having(block, None))
        return self._group(tree)

    def _count(self, tree: Pairs) -> Condition:
        block = Block(tree, "A condition", ("count", "of"), self.faults)
        least, listed = block.number("count") or 0, block.tree("of")
        parts = tuple(self.condition(item) for item in listed.items) if isinstance(listed, Items) else ()
        if not 1 <= least <= len(parts):
            block.fault("rules-unreachable", f"There cannot be {least} of {len(parts)} conditions.")
            return _NEVER
        return Count(least, parts)

    def _group(self, tree: Pairs) -> Condition:
        block = Block(tree, "A condition", ("all", "any", "first", "not", "use"), self.faults)
        if len(tree.items) != 1:
            block.fault("rules-condition", "A condition has exactly one of all, any, first, count, not, use, "
                        "fact, entry, judge or compute.")  # fmt: skip
            return _NEVER
        key, value = tree.items[0]
        if key.text == "use":
            return self._use(block.text("use", needed=True), key.line)
        if key.text == "not":
            return Not(self.condition(value))
        if not isinstance(value, Items) or not value.items:
            block.fault("rules-condition", f"{key.text} needs a list of conditions.", line=key.line)
            return _NEVER
        parts = tuple(self.condition(item) for item in value.items)
        if key.text == "all":
            self._refuse_unreachable(parts, value.line)
            return All(parts)
        return First(parts) if key.text == "first" else Any(parts)

    def _use(self, name: str, line: int) -> Condition:
        if name in self._named:
            return self._named[name]
        if name not in self.words.conditions:
            hint = self.faults.near(name, self.words.conditions)
            self.faults.add(line, "rules-unknown-condition", f"There is no condition named {name}.{hint}")
            return _NEVER
        tree, file = self.words.conditions[name]
        if name in self._open:
            path = " -> ".join((*self._open[self._open.index(name) :], name))
            self.faults.add(
                tree.line, "rules-cycle", f"Conditions refer to each other in a circle: {path}.", source=file
            )
            return _NEVER
        self._open.append(name)
        before, self.faults.source = self.faults.source, file
        found = self._named[name] = self.condition(tree)
        self.faults.source = before
        self._open.pop()
        return found

    def subject(self, tree: Tree | None) -> Atom:
        """The subject of a rule: an id, or an atom."""
        if isinstance(tree, Text):
            tree = Pairs(((Text("fact", tree.line), tree),), tree.line)
        if not isinstance(tree, Pairs) or "fact" not in {key.text for key, _ in tree.items}:
            self.faults.add(
                tree.line if tree else 0, "rules-subject", "A rule's finding is an id or {fact: ...}."
            )
            return Atom("", Window("", None))
        return self.atom(tree)

    def atom(self, tree: Pairs) -> Atom:
        """One question about one id."""
        block = Block(tree, "A condition", _ATOM_KEYS, self.faults)
        fact = block.text("fact", needed=True)
        kind = kinds().get(fact)
        if kind is None:
            hint = self.faults.near(fact, kinds())
            block.fault(
                "rules-unknown-finding",
                f"There is no finding or fact {fact}.{hint}",
                line=block.line_of("fact"),
            )
            return Atom("", Window("", None))
        window = self._window(block, fact)
        answers, against = frozenset(block.texts("answer")), frozenset(block.texts("against"))
        bounds = self._bounds(block, kind)
        self._check_kind(block, kind, answers | against)
        if answers & against:
            block.fault("rules-unreachable", f"{fact}: an answer cannot count for and against.")
        default = "present" if kind.kind == "sign" or answers or bounds else "recorded"
        atom = Atom(
            fact,
            window,
            want=block.one_of("is", _WANTS, default=default),
            answers=answers,
            against=against if "against" in block else None,
            bounds=bounds,
            having=self._having(block, kind),
            sources=self._sources(block),
            matching=self._matching(block, kind),
            slack=3600 if window.same_encounter else 86400,
        )
        # The same question is asked by many rules; one object is judged once.
        return self._atoms.setdefault(_key(atom), atom)

    def _window(self, block: Block, fact: str) -> Window:
        name = block.text("window")
        if not name:
            # An earlier examination is never of today; the newest one is taken, however old.
            only_earlier = block.texts("from") == (Source.EARLIER_EXAM,)
            return self.words.windows["permanent"] if only_earlier else self.words.window_of(fact)
        if name not in self.words.windows:
            hint = self.faults.near(name, self.words.windows)
            block.fault(
                "rules-unknown-window", f"There is no window {name}.{hint}", line=block.line_of("window")
            )
        return self.words.windows.get(name, Window(name, None))

    def _check_kind(self, block: Block, kind: Kind, answers: frozenset[str]) -> None:
        if answers and kind.kind != "choice":
            block.fault("rules-wrong-kind", f"{kind.id} is a {kind.kind} and has no answers.")
        elif unknown := sorted(answers - kind.answers):
            hint = self.faults.near(unknown[0], kind.answers)
            block.fault(
                "rules-unknown-answer",
                f"{kind.id} has no answer {unknown[0]}.{hint}",
                line=block.line_of("answer"),
            )
        if kind.kind == "choice" and not answers and block.text("is") == "present":
            block.fault("rules-wrong-kind", f"{kind.id} is a choice: name the answer, or write is: recorded.")

    def _bounds(self, block: Block, kind: Kind | None) -> tuple[Bound, ...]:
        found = []
        for op in BOUNDS:
            if op not in block:
                continue
            if kind is not None and kind.kind != "quantity":
                block.fault(
                    "rules-wrong-kind",
                    f"{kind.id} is a {kind.kind} and has no threshold.",
                    line=block.line_of(op),
                )
                continue
            cutoff = self._cutoff(block, op, kind)
            if cutoff is not None:
                found.append(Bound(op, cutoff))
        self._refuse_empty_range(block, found, kind)
        return tuple(found)

    def _cutoff(self, block: Block, op: str, kind: Kind | None) -> Cutoff | None:
        text = block.text(op, needed=True)
        named = self.words.cutoffs.get(text)
        unit = kind.unit if kind else named.unit if named else _own_unit(text)
        if named is not None:
            if named.unit == unit:
                return named
            value = quantity(f"{named.value} {named.unit}", unit)
        else:
            value = quantity(text, unit)
        if isinstance(value, str):
            hint = self.faults.near(text, self.words.cutoffs)
            block.fault("rules-threshold", f"{value}.{hint}", line=block.line_of(op))
            return None
        if named is not None:
            return Cutoff(named.name, value, unit, named.source, named.seen, ())
        return Cutoff("", value, unit, "", "")

    def _refuse_empty_range(self, block: Block, bounds: list[Bound], kind: Kind | None) -> None:
        lower = max((b.cutoff.value for b in bounds if b.op in ("at-least", "above")), default=None)
        upper = min((b.cutoff.value for b in bounds if b.op in ("at-most", "below")), default=None)
        if lower is not None and upper is not None and lower > upper:
            block.fault("rules-unreachable", "No number lies above the lower and below the upper threshold.")
        outside = kind is not None and (
            (lower is not None and kind.high is not None and lower > kind.high)
            or (upper is not None and kind.low is not None and upper < kind.low)
        )
        if outside:
            block.fault(
                "rules-unreachable", "The threshold lies outside every plausible value of its finding."
            )

    def _having(self, block: Block, kind: Kind | None) -> tuple[Having, ...]:
        found = []
        axes = catalogue.load().axes
        for key, value in block.pairs("with"):
            if kind is not None and key.text not in kind.qualifiers:
                hint = self.faults.near(key.text, kind.qualifiers)
                self.faults.add(
                    key.line, "rules-unknown-property", f"{kind.id} has no property {key.text}.{hint}"
                )
                continue
            if key.text == "grade":
                grade = Block(value, "A grade", ("at-least", "at-most", "of"), self.faults)
                low, high = grade.number("at-least"), grade.number("at-most")
                found.append(Having("grade", low=low, high=high, of=grade.number("of") or 0))
                continue
            values = frozenset(
                Block(Pairs(((key, value),), key.line), "with", (key.text,), self.faults).texts(key.text)
            )
            axis = axes.get(key.text)
            unknown = sorted(values - axis.values.keys()) if axis else [key.text]
            if unknown or not values:
                text = f"{key.text} has no value {unknown[0] if unknown else ''}."
                self.faults.add(
                    key.line,
                    "rules-unknown-answer",
                    text + self.faults.near(unknown[0] if unknown else "", axis.values if axis else axes),
                )
            found.append(Having(key.text, values))
        return tuple(found)

    def _sources(self, block: Block) -> frozenset[str]:
        found = frozenset(block.texts("from"))
        for unknown in sorted(found - set(Source)):
            block.fault(
                "rules-unknown-value",
                f"There is no source {unknown}.{self.faults.near(unknown, list(Source))}",
            )
        return found

    def _matching(self, block: Block, kind: Kind) -> tuple[str, ...]:
        found = block.texts("matching")
        for axis in sorted(set(found) - kind.qualifiers - {STUDY}):
            block.fault("rules-unknown-property", f"{kind.id} has no property {axis}.")
        return found

    def _refuse_unreachable(self, parts: Iterable[Condition], line: int) -> None:
        wanted: dict[str, str] = {}
        limits: dict[str, list[Bound]] = {}
        for part in parts:
            if not isinstance(part, Atom) or part.having or part.sources or part.matching:
                continue
            if part.want in ("present", "absent") and wanted.setdefault(part.fact, part.want) != part.want:
                self.faults.add(
                    line, "rules-unreachable", f"{part.fact} cannot be present and absent together."
                )
            limits.setdefault(part.fact, []).extend(part.bounds)
        for fact, bounds in limits.items():
            low = max((b.cutoff.value for b in bounds if b.op in ("at-least", "above")), default=None)
            high = min((b.cutoff.value for b in bounds if b.op in ("at-most", "below")), default=None)
            if low is not None and high is not None and low > high:
                self.faults.add(line, "rules-unreachable", f"{fact} cannot keep both thresholds together.")


def _own_unit(text: str) -> str:
    return text.strip().partition(" ")[2].strip()


def _key(atom: Atom) -> tuple[object, ...]:
    return (
        atom.fact, atom.window, atom.want, atom.answers, atom.against, atom.bounds, atom.having, atom.sources,
        atom.matching,
    )  # fmt: skip
