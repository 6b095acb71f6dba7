"""Reads the rules of rule files into `Rule` values; every fault of every rule is found in one go."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Final

from fhirgallop.reasoning.block import Block
from fhirgallop.reasoning.building import Builder
from fhirgallop.reasoning.conditions import Condition
from fhirgallop.reasoning.defining import SEEN
from fhirgallop.reasoning.faults import Faults
from fhirgallop.reasoning.rule import Reach, Rule
from fhirgallop.reasoning.vocabulary import CEILING, Relation, Strength, Tier
from fhirgallop.reasoning.yaml_tree import Items, Pairs, Tree

_KEYS: Final = (
    "id", "row", "relation", "finding", "when", "unless", "other", "strength", "tier", "family", "yields-to",
    "suppresses", "caps", "only-with",
    "holds-in", "source", "seen", "reading", "confidence", "mechanism", "wording", "note",
)  # fmt: skip
_ID: Final = re.compile(r"[a-z][a-z0-9]{0,15}\.[a-z0-9]+(?:-[a-z0-9]+){0,15}", re.ASCII)
GROUPS: Final = frozenset({"child", "pregnancy"})
_READINGS: Final = ("supports", "supports-with-limits", "contradicts", "not-found")
_CONFIDENCE: Final = ("high", "moderate", "low")
# Nobody is told that they are wrong: what is below a definition is unusual, not impossible.
_HARSH: Final = re.compile(r"\b(error|wrong|mistake|impossible|incorrect|must|invalid)", re.IGNORECASE)
_HARSH_BELOW_HARD: Final = re.compile(r"\b(contradict|cannot both)", re.IGNORECASE)


def read_rules(trees: Mapping[str, Tree], builder: Builder, faults: Faults) -> dict[str, Rule]:
    """All rules by id, in the order of the files; a second rule of the same id is a fault."""
    found: dict[str, Rule] = {}
    for name, tree in trees.items():
        faults.source = name
        rows = {key.text: value for key, value in tree.items} if isinstance(tree, Pairs) else {}
        listed = rows.get("rules")
        if listed is None:
            continue
        if not isinstance(listed, Items):
            faults.add(listed.line, "rules-form", "Rules are a list.")
            continue
        for item in listed.items:
            rule = _rule(item, builder, faults)
            other = found.setdefault(rule.id, rule)
            if other is not rule:
                text = f"The rule {rule.id} stands already in {other.file} line {other.line}."
                faults.add(rule.line, "rules-duplicate-id", text)
    return found


def _rule(tree: Tree, builder: Builder, faults: Faults) -> Rule:
    block = Block(tree, "A rule", _KEYS, faults)
    id_ = block.text("id", needed=True)
    block.what = f"Rule {id_}"
    if not _ID.fullmatch(id_):
        block.fault("rules-id", f"{id_[:60] or 'The id'} is not an id such as s4.in-atrial-fibrillation.")
    rule = Rule(
        id=id_,
        rows=block.texts("row"),
        relation=Relation(block.one_of("relation", [r.value for r in Relation], needed=True)),
        subject=builder.subject(block.tree("finding")),
        when=_optional(block, "when", builder),
        unless=_optional(block, "unless", builder),
        other=_optional(block, "other", builder),
        strength=Strength(block.one_of("strength", [s.value for s in Strength], default="none", needed=True)),
        tier=Tier(block.one_of("tier", [t.value for t in Tier], default="T0", needed=True)),
        family=block.text("family"),
        yields_to=block.texts("yields-to"),
        suppresses=_reach(block, "suppresses"),
        caps=_reach(block, "caps"),
        cap=_cap(block),
        holds_in=_holds_in(block),
        only_with_conflict=block.text("only-with") == "conflict",
        source=block.text("source", needed=True),
        seen=block.one_of("seen", SEEN, needed=True),
        reading=block.one_of("reading", ("", *_READINGS)),
        confidence=block.one_of("confidence", _CONFIDENCE, needed=True),
        mechanism=block.text("mechanism", needed=True),
        wording=block.text("wording"),
        note=block.text("note"),
        file=faults.source,
        line=block.line,
    )
    _check(rule, block, builder)
    return rule


def _optional(block: Block, key: str, builder: Builder) -> Condition | None:
    return builder.condition(block.tree(key)) if key in block else None


def _reach(block: Block, key: str) -> Reach | None:
    if key not in block:
        return None
    exceptions: tuple[str, ...] = ()
    tree = block.tree(key)
    if not isinstance(tree, Pairs):
        entries = block.texts(key)
    else:
        inner = Block(tree, f"{block.what}: {key}", ("rules", "except", "to"), block.faults)
        entries, exceptions = inner.texts("rules"), inner.texts("except")
    sorted_out: dict[str, set[str]] = {"family": set(), "finding": set(), "not-for": set(), "": set()}
    for entry in entries:
        kind, _, name = entry.rpartition(":")
        sorted_out.get(kind, sorted_out[""]).add(name)
    return Reach(
        rules=frozenset(sorted_out[""]),
        families=frozenset(sorted_out["family"]),
        findings=frozenset(sorted_out["finding"]),
        not_for=frozenset(sorted_out["not-for"]),
        except_rules=frozenset(e for e in exceptions if not e.startswith("family:")),
        except_families=frozenset(e.removeprefix("family:") for e in exceptions if e.startswith("family:")),
    )


def _holds_in(block: Block) -> frozenset[str]:
    named = frozenset(block.texts("holds-in"))
    for unknown in sorted(named - GROUPS):
        block.fault(
            "rules-unknown-value",
            f"{block.what}: there is no group {unknown}.",
            line=block.line_of("holds-in"),
        )
    return GROUPS if block.text("strength") == Strength.HARD else named


def _cap(block: Block) -> Tier:
    tree = block.tree("caps")
    if not isinstance(tree, Pairs):
        return Tier.T0
    inner = Block(tree, f"{block.what}: caps", ("rules", "except", "to"), block.faults)
    return Tier(inner.one_of("to", [t.value for t in Tier], needed=True, default="T0"))


def _check(rule: Rule, block: Block, builder: Builder) -> None:
    if not rule.rows and not rule.note:
        block.fault("rules-missing-key", f"{block.what} lacks row: the evidence it carries out.")
    if rule.relation is Relation.GUARD:
        if not (rule.suppresses or rule.caps or rule.wording):
            block.fault(
                "rules-missing-key", f"{block.what} suppresses nothing, caps nothing and says nothing."
            )
    elif rule.other is None:
        block.fault("rules-missing-key", f"{block.what} lacks other: what it {rule.relation}.")
    if rule.relation is not Relation.GUARD and (rule.suppresses or rule.caps):
        block.fault("rules-unknown-key", f"{block.what}: only a guard silences other rules.")
    if rule.family and rule.family not in builder.words.families:
        hint = block.faults.near(rule.family, builder.words.families)
        block.fault(
            "rules-unknown-family", f"There is no family {rule.family}.{hint}", line=block.line_of("family")
        )
    _check_tier(rule, block)
    _check_wording(rule, block)


def _check_tier(rule: Rule, block: Block) -> None:
    if rule.tier is Tier.U:
        if rule.relation is not Relation.SUGGESTS or rule.wording:
            block.fault("rules-urgent", f"{block.what}: an urgent rule has the relation suggests and "
                        "no wording, for it is shown as the fixed phrase only.")  # fmt: skip
        for atom in rule.atoms():
            window = getattr(atom, "window", None)
            if window is not None and window.within is not None and not window.drops:
                block.fault("rules-urgent", f"{block.what}: every part of an urgent combination needs a "
                            "window outside of which it is unknown.")  # fmt: skip
                break
    elif rule.tier is not rule.tier.at_most(CEILING[rule.strength]):
        block.fault("rules-tier", f"{block.what}: {rule.strength} bears at most {CEILING[rule.strength]}.",
                    line=block.line_of("tier"))  # fmt: skip


def _check_wording(rule: Rule, block: Block) -> None:
    line = block.line_of("wording")
    if rule.tier in (Tier.T1, Tier.T2) and not rule.wording:
        block.fault("rules-missing-key", f"{block.what} lacks wording: one sentence for its card.")
    if harsh := _HARSH.search(rule.wording):
        block.fault("rules-wording", f"{block.what}: say it without '{harsh.group(0)}'.", line=line)
    if rule.strength is not Strength.HARD and (harsh := _HARSH_BELOW_HARD.search(rule.wording)):
        block.fault(
            "rules-wording",
            f"{block.what}: below hard say 'unusual together', not '{harsh.group(0)}'.",
            line=line,
        )
