"""Rulebook: all rules in force, found by finding; read from rules/*.yaml once, and from a site's file.

The shipped files are compiled into rules/compiled.json, which is used while it fits them; see `__main__`.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path
from types import MappingProxyType
from typing import Final

from fhirgallop.errors import AssetError
from fhirgallop.outcome import Issue, has_errors, ordered
from fhirgallop.reasoning.block import Block
from fhirgallop.reasoning.building import Builder
from fhirgallop.reasoning.checking import check_references, check_retuned
from fhirgallop.reasoning.defining import SITE_KEYS, TOP_KEYS, Choice, choices_of, read_vocabulary
from fhirgallop.reasoning.faults import Faults
from fhirgallop.reasoning.likelihood import LikelihoodRow, read_likelihoods
from fhirgallop.reasoning.program import Program
from fhirgallop.reasoning.reading import read_rules
from fhirgallop.reasoning.rule import Rule
from fhirgallop.reasoning.vocabulary import Cutoff, Family, Recheck, Relation, Strength, Tier, Window
from fhirgallop.reasoning.yaml_tree import Tree, dump, parse, undump

FOLDER: Final = Path(__file__).resolve().parent / "rules"
COMPILED: Final = FOLDER / "compiled.json"


@dataclass(frozen=True)
class Rulebook:
    """The rules in force.

    Attributes:
        rules: by id, in the order of the files.
        program: the rules in force, guards apart, ready to be decided.
        guards: the guards in force.
        rechecks: what looking again costs, first match wins.
        silenced: rules that the site switched off.
        left_out: rows of the evidence that are no rule, each with the reason.
        version: short digest of everything that was read.
    """

    rules: Mapping[str, Rule]
    program: Program
    guards: Program
    families: Mapping[str, Family]
    cutoffs: Mapping[str, Cutoff]
    windows: Mapping[str, Window]
    rechecks: tuple[Recheck, ...]
    likelihoods: tuple[LikelihoodRow, ...]
    silenced: frozenset[str]
    left_out: Mapping[str, str]
    version: str


@cache
def load() -> Rulebook:
    """The shipped rules.

    Raises:
        AssetError: a rule file is missing or faulty; the first faults stand in the message.
    """
    book, issues = build(shipped_trees(), None)
    if book is None:
        raise AssetError("rule files are faulty: " + "; ".join(str(issue) for issue in issues[:5]))
    return book


def with_site(text: str, name: str) -> tuple[Rulebook | None, list[Issue]]:
    """The shipped rules with a site's own file over them, or None and everything that is wrong with it."""
    faults = Faults(name)
    tree = parse(text, faults)
    if tree is None:
        return (None, faults.issues) if faults.issues else (load(), [])
    book, issues = build(shipped_trees(), (name, tree))
    issues = ordered([*faults.issues, *issues])
    return (None if has_errors(issues) else book), issues


def check_text(texts: Mapping[str, str]) -> list[Issue]:
    """Every fault of rule files given as texts, judged as one whole without the shipped ones."""
    faults = Faults()
    trees = {}
    for name, text in texts.items():
        faults.source = name
        tree = parse(text, faults)
        if tree is not None:
            trees[name] = tree
    return ordered([*faults.issues, *build(trees, None)[1]])


def build(trees: Mapping[str, Tree], site: tuple[str, Tree] | None) -> tuple[Rulebook | None, list[Issue]]:
    """The rulebook of some files, or None, with all issues."""
    faults = Faults()
    everything = dict(trees)
    choices: dict[str, Choice] = {}
    if site:
        faults.source = site[0]
        everything[site[0]] = site[1]
        choices = choices_of(site[1], faults)
    words = read_vocabulary(everything, choices, faults)
    builder = Builder(words, faults)
    builder.all_named()
    rules = read_rules(everything, builder, faults)
    ratios = _likelihoods(everything, builder, faults)
    if site:
        faults.source = site[0]
        for name in sorted(choices.keys() - words.cutoffs.keys()):
            faults.add(
                choices[name].line,
                "rules-choice",
                f"There is no cut-off {name}.{faults.near(name, words.cutoffs)}",
            )
        silenced, rules = _apply_site(site[1], rules, faults)
    else:
        silenced = frozenset()
    check_references(rules, words.families, faults)
    issues = ordered(faults.issues)
    if has_errors(issues):
        return None, issues
    in_force = [rule for rule in rules.values() if rule.id not in silenced]
    book = Rulebook(
        rules=MappingProxyType(rules),
        program=Program(rule for rule in in_force if rule.relation is not Relation.GUARD),
        guards=Program(rule for rule in in_force if rule.relation is Relation.GUARD),
        families=MappingProxyType(words.families),
        cutoffs=MappingProxyType(words.cutoffs),
        windows=MappingProxyType(words.windows),
        rechecks=tuple(words.rechecks),
        likelihoods=ratios,
        silenced=silenced,
        left_out=MappingProxyType(words.left_out),
        version=_digest(everything),
    )
    return book, issues


def _likelihoods(trees: Mapping[str, Tree], builder: Builder, faults: Faults) -> tuple[LikelihoodRow, ...]:
    found: list[LikelihoodRow] = []
    for name, tree in trees.items():
        faults.source = name
        found += read_likelihoods(Block(tree, "A rule file", (*TOP_KEYS, *SITE_KEYS), Faults(name)), builder)
    return tuple(found)


def _apply_site(tree: Tree, rules: dict[str, Rule], faults: Faults) -> tuple[frozenset[str], dict[str, Rule]]:
    block = Block(tree, "A site file", (*TOP_KEYS, *SITE_KEYS), faults)
    silenced = frozenset(block.texts("silence"))
    for name in sorted(silenced - rules.keys()):
        block.fault("rules-unknown-rule", f"There is no rule {name} to silence.{faults.near(name, rules)}")
    retuned = dict(rules)
    for key, value in block.pairs("retune"):
        rule = rules.get(key.text)
        if rule is None:
            faults.add(
                key.line, "rules-unknown-rule", f"There is no rule {key.text}.{faults.near(key.text, rules)}"
            )
            continue
        inner = Block(value, f"Retuning {key.text}", ("tier", "strength"), faults)
        tier = Tier(inner.one_of("tier", [t.value for t in Tier], default=rule.tier.value))
        strength = Strength(
            inner.one_of("strength", [s.value for s in Strength], default=rule.strength.value)
        )
        check_retuned(rule, tier, strength, key.line, faults)
        retuned[key.text] = replace(rule, tier=tier, strength=strength)
    return silenced, retuned


def shipped_trees() -> Mapping[str, Tree]:
    """The trees of the shipped rule files, from the compiled file while it fits them."""
    texts = shipped_texts()
    if COMPILED.exists():
        compiled = json.loads(COMPILED.read_text(encoding="utf-8"))
        if compiled.get("digests") == {name: _sha(text) for name, text in texts.items()}:
            return {name: undump(tree) for name, tree in compiled["trees"].items()}
    faults = Faults()
    return _parsed(texts, faults)


def _parsed(texts: Mapping[str, str], faults: Faults) -> Mapping[str, Tree]:
    trees = {}
    for name, text in texts.items():
        faults.source = name
        tree = parse(text, faults)
        if tree is not None:
            trees[name] = tree
    if faults.issues:
        raise AssetError("rule files cannot be read: " + "; ".join(map(str, faults.issues[:5])))
    return trees


def shipped_texts() -> Mapping[str, str]:
    """File name -> text of the shipped rule files, in the order of their names."""
    paths = sorted(FOLDER.glob("*.yaml"))
    if not paths:
        raise AssetError("no rule files are installed; install fhirgallop again")
    return {path.name: path.read_text(encoding="utf-8") for path in paths}


def compiled_text() -> str:
    """What rules/compiled.json has to hold for the rule files as they are now."""
    texts = shipped_texts()
    trees = _parsed(texts, Faults())
    content = {
        "digests": {name: _sha(text) for name, text in texts.items()},
        "trees": {name: dump(tree) for name, tree in trees.items()},
    }
    return json.dumps(content, ensure_ascii=False, separators=(",", ":")) + "\n"


def _sha(text: str) -> str:
    return hashlib.sha256(text.encode()).hexdigest()


def _digest(trees: Mapping[str, Tree]) -> str:
    said = json.dumps([[name, dump(tree)] for name, tree in trees.items()], ensure_ascii=False)
    return _sha(said)[:12]
