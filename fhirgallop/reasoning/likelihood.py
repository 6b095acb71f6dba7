"""Likelihood ratios: only for a pretest value that the user gave, and only in the ratio's population.

Each ratio stands alone: they are never multiplied, for bedside findings of one condition are correlated. A
ratio whose interval spans 1 is refused. The arithmetic is haemodynamics' `probability.post-test`.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from decimal import Decimal
from typing import TYPE_CHECKING, Any, Final

from fhirgallop.haemodynamics import COMPUTATIONS, Result
from fhirgallop.reasoning.block import Block
from fhirgallop.reasoning.conditions import Condition, Support, View
from fhirgallop.reasoning.defining import SEEN
from fhirgallop.reasoning.logic import Truth
from fhirgallop.reasoning.yaml_tree import Items

if TYPE_CHECKING:
    from fhirgallop.reasoning.building import Builder
    from fhirgallop.reasoning.rulebook import Rulebook

_KEYS: Final = (
    "id", "finding", "label", "target", "population", "method", "present", "absent",
    "source", "seen", "caution",
)  # fmt: skip
_METHODS: Final = ("auscultation", "phonocardiogram", "bedside", "laboratory", "ecg", "history")
_NUMBER: Final = r"[0-9]{1,4}(?:\.[0-9]{1,3})?"
_RATIO: Final = re.compile(rf"({_NUMBER})(?: \(({_NUMBER})-({_NUMBER})\))?", re.ASCII)
_RANGE: Final = re.compile(rf"({_NUMBER})-({_NUMBER})", re.ASCII)


@dataclass(frozen=True, slots=True)
class Ratio:
    """A published ratio; `value` is None where only a range across studies was published."""

    value: Decimal | None
    low: Decimal | None
    high: Decimal | None

    def __str__(self) -> str:
        if self.value is None:
            return f"{self.low}-{self.high}"
        return str(self.value) if self.low is None else f"{self.value} ({self.low}-{self.high})"


@dataclass(frozen=True, slots=True, eq=False)
class LikelihoodRow:
    """One published finding with its ratios when present and when absent, in its population."""

    id: str
    label: str
    finding: Condition
    target: str
    population: str
    method: str
    present: Ratio | None
    absent: Ratio | None
    source: str
    seen: str
    caution: str


@dataclass(frozen=True, slots=True)
class Pretest:
    """What the user believes before the finding: a probability between 0 and 1, and for which population."""

    probability: Decimal
    population: str


@dataclass(frozen=True, slots=True)
class Likelihood:
    """One ratio applied, or the reason why it was not.

    Attributes:
        probability: after the finding; None when refused, or when only a range can be given.
        low, high: from the ends of the ratio's interval; None when none was published.
        refused: why there is no number; empty when there is one.
    """

    row: LikelihoodRow
    is_present: bool
    ratio: Ratio
    probability: Decimal | None = None
    low: Decimal | None = None
    high: Decimal | None = None
    refused: str = ""

    def as_dict(self) -> dict[str, Any]:
        """JSON values; probabilities as text, exact."""
        return {
            "id": self.row.id,
            "label": self.row.label,
            "target": self.row.target,
            "population": self.row.population,
            "method": self.row.method,
            "is_present": self.is_present,
            "ratio": str(self.ratio),
            "probability": _plain(self.probability),
            "low": _plain(self.low),
            "high": _plain(self.high),
            "refused": self.refused,
            "source": {"text": self.row.source, "seen": self.row.seen},
            "caution": self.row.caution,
        }


def _plain(value: Decimal | None) -> str | None:
    return None if value is None else f"{value:.4f}"


def likelihoods(book: Rulebook, view: View, pretests: Mapping[str, Pretest]) -> tuple[Likelihood, ...]:
    """Every ratio of the targets for which the user gave a pretest value, each by itself."""
    found = []
    for row in book.likelihoods:
        pretest = pretests.get(row.target)
        if pretest is None or not 0 < pretest.probability < 1:
            continue
        truth = row.finding.judge(view)
        ratio = {Truth.TRUE: row.present, Truth.FALSE: row.absent, Truth.UNKNOWN: None}[truth]
        if ratio is None:
            continue
        if row.method == "auscultation" and _from_a_tracing(row.finding.supports(view, truth)):
            refused = "Published for the ear; this sound was found on a tracing."
            found.append(Likelihood(row, truth is Truth.TRUE, ratio, refused=refused))
            continue
        found.append(_apply(row, truth is Truth.TRUE, ratio, pretest))
    return tuple(found)


def _from_a_tracing(supports: tuple[Support, ...]) -> bool:
    """Ratios of the ear and of a phonocardiogram are not interchangeable."""
    return bool(supports) and all(
        any("phonocardiography" in ground.item.values("method") for ground in support) for support in supports
    )


def _apply(row: LikelihoodRow, is_present: bool, ratio: Ratio, pretest: Pretest) -> Likelihood:
    if pretest.population != row.population:
        return Likelihood(
            row, is_present, ratio, refused=f"Published for another population: {row.population}."
        )
    if ratio.low is not None and ratio.high is not None and ratio.low <= 1 <= ratio.high:
        return Likelihood(row, is_present, ratio, refused="Not informative: the interval spans 1.")
    if ratio.value == 0:
        return Likelihood(
            row, is_present, ratio, refused="The ratio is below 0.1; a number would pretend certainty."
        )
    before = pretest.probability
    return Likelihood(
        row,
        is_present,
        ratio,
        probability=_after(before, ratio.value),
        low=_after(before, ratio.low),
        high=_after(before, ratio.high),
    )


def _after(before: Decimal, ratio: Decimal | None) -> Decimal | None:
    if ratio is None:
        return None
    result = COMPUTATIONS["probability.post-test"](pretest_probability=before, likelihood_ratio=ratio)
    return result.value if isinstance(result, Result) else Decimal(0)


def read_likelihoods(block: Block, builder: Builder) -> tuple[LikelihoodRow, ...]:
    """The rows under `likelihoods:` of a rule file."""
    tree = block.tree("likelihoods")
    if tree is None:
        return ()
    if not isinstance(tree, Items):
        block.fault("rules-form", "Likelihoods are a list.", line=tree.line)
        return ()
    found = []
    for item in tree.items:
        row = Block(item, "A likelihood", _KEYS, block.faults)
        row.what = f"Likelihood {row.text('id', needed=True)}"
        present, absent = _ratio(row, "present"), _ratio(row, "absent")
        if present is None and absent is None:
            row.fault("rules-missing-key", f"{row.what} has neither a ratio when present nor when absent.")
        found.append(
            LikelihoodRow(
                id=row.text("id"),
                label=row.text("label", needed=True),
                finding=builder.condition(row.tree("finding")),
                target=row.text("target", needed=True),
                population=row.text("population", needed=True),
                method=row.one_of("method", _METHODS, needed=True),
                present=present,
                absent=absent,
                source=row.text("source", needed=True),
                seen=row.one_of("seen", SEEN, needed=True),
                caution=row.text("caution"),
            )
        )
    return tuple(found)


def _ratio(row: Block, key: str) -> Ratio | None:
    text = row.text(key)
    if not text:
        return None
    if plain := _RATIO.fullmatch(text):
        value, low, high = (Decimal(part) if part else None for part in plain.groups())
        if low is None or high is None or value is None or low <= value <= high:
            return Ratio(value, low, high)
    elif across := _RANGE.fullmatch(text):
        return Ratio(None, Decimal(across.group(1)), Decimal(across.group(2)))
    row.fault("rules-ratio", f"{row.what}: {key} is a ratio such as 11 (4.9-25), or a range such as 2.8-130.",
              line=row.line_of(key))  # fmt: skip
    return None
