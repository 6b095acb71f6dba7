"""Checks that span rules: names that lead nowhere, circles, and what a site may not retune."""

from __future__ import annotations

from collections.abc import Iterable, Mapping

from fhirgallop.reasoning.faults import Faults
from fhirgallop.reasoning.rule import Reach, Rule
from fhirgallop.reasoning.vocabulary import CEILING, Family, Strength, Tier


def check_references(rules: Mapping[str, Rule], families: Mapping[str, Family], faults: Faults) -> None:
    """Every rule, family and finding that a rule names exists, and no rules yield in a circle."""
    findings = {rule.finding for rule in rules.values()}
    for rule in rules.values():
        for name in rule.yields_to:
            _known(name, rules, "rule", rule, faults)
        for reach in (rule.suppresses, rule.caps):
            if reach is not None:
                _check_reach(reach, rule, rules, families, findings, faults)
        if rule.only_with_conflict and rule.suppresses is not None:
            faults.add(
                rule.line,
                "rules-unknown-key",
                f"Rule {rule.id}: only-with belongs to a note.",
                source=rule.file,
            )
    _refuse_circles({rule.id: rule.yields_to for rule in rules.values()}, rules, faults)


def _check_reach(
    reach: Reach,
    rule: Rule,
    rules: Mapping[str, Rule],
    families: Mapping[str, Family],
    findings: set[str],
    faults: Faults,
) -> None:
    for name in sorted(reach.rules | reach.except_rules):
        _known(name, rules, "rule", rule, faults)
    for name in sorted(reach.families | reach.except_families):
        _known(name, families, "family", rule, faults)
    for name in sorted(reach.findings):
        _known(name, findings, "finding with rules", rule, faults)


def _known(name: str, known: Iterable[str], what: str, rule: Rule, faults: Faults) -> None:
    if name not in known:
        hint = faults.near(name, known)
        faults.add(
            rule.line,
            "rules-unknown-rule",
            f"Rule {rule.id}: there is no {what} {name}.{hint}",
            source=rule.file,
        )


def _refuse_circles(leads: Mapping[str, tuple[str, ...]], rules: Mapping[str, Rule], faults: Faults) -> None:
    done: set[str] = set()
    for start in leads:
        path: list[str] = []
        stack: list[tuple[str, bool]] = [(start, False)]
        while stack:
            name, leaving = stack.pop()
            if leaving:
                done.add(path.pop())
            elif name in path:
                circle = " -> ".join((*path[path.index(name) :], name))
                rule = rules[name]
                text = f"Rules yield to each other in a circle: {circle}."
                faults.add(rule.line, "rules-cycle", text, source=rule.file)
            elif name not in done:
                path.append(name)
                stack.append((name, True))
                stack.extend((other, False) for other in leads.get(name, ()))


def check_retuned(rule: Rule, tier: Tier, strength: Strength, line: int, faults: Faults) -> None:
    """A site may soften a rule; it may not make one interrupt, nor show an urgent one in its own words."""
    if tier is not rule.tier and (tier in (Tier.U, Tier.T1) or rule.tier is Tier.U):
        faults.add(line, "rules-retune", f"{rule.id} cannot be retuned from {rule.tier} to {tier}; "
                   "a rule may be made quieter, and an urgent one only silenced.")  # fmt: skip
    elif tier is not tier.at_most(CEILING[strength]) and tier is not Tier.U:
        faults.add(
            line, "rules-retune", f"{rule.id}: strength {strength} bears at most tier {CEILING[strength]}."
        )
    elif tier is Tier.T2 and not rule.wording:
        faults.add(line, "rules-retune", f"{rule.id} has no wording for a card; it stays in the panel.")
