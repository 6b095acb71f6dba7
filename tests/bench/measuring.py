"""How the benchmarks measure: candidates interleaved, a ratio a round, the median over rounds.

The machines are noisy: only ratios within one run mean anything.
"""

from __future__ import annotations

import gc
import statistics
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass


@dataclass(frozen=True)
class Row:
    """One line of the table: what was measured, the figure, and the goal it is held against.

    `passes` is False when the figure is so far off that the run has to fail; without a wider limit of its
    own, a missed goal does that.
    """

    what: str
    figure: float
    unit: str
    goal: str
    holds: bool
    passes: bool

    def __str__(self) -> str:
        return (
            f"| {self.what} | {self.figure:.3g} {self.unit} | {self.goal} | {'yes' if self.holds else 'NO'} |"
        )


def interleaved(
    candidates: Mapping[str, Callable[[], object]], *, rounds: int = 15, calls: int = 100
) -> dict[str, list[float]]:
    """Seconds a call of every candidate, once a round, in turn."""
    times: dict[str, list[float]] = {name: [] for name in candidates}
    for candidate in candidates.values():
        candidate()
    was_enabled = gc.isenabled()
    gc.disable()
    try:
        for number in range(rounds):
            for name, candidate in candidates.items():
                for _ in range(1 + calls // 10):  # the others, and the collector, have emptied the caches
                    candidate()
                start = time.perf_counter()
                for _ in range(calls):
                    candidate()
                times[name].append((time.perf_counter() - start) / calls)
            if number % 10 == 0:
                gc.collect()
    finally:
        if was_enabled:
            gc.enable()
    return times


def ratio(times: Mapping[str, list[float]], above: str, below: str) -> float:
    """Median over rounds of `above` / `below`."""
    return statistics.median(a / b for a, b in zip(times[above], times[below], strict=True))


def at_most(what: str, figure: float, limit: float, unit: str = "x", *, fails: float | None = None) -> Row:
    """A row whose goal is an upper limit; `fails`: the wider one above which the run fails."""
    if fails is None:
        return Row(what, figure, unit, f"at most {limit:g}", figure <= limit, figure <= limit)
    return Row(
        what, figure, unit, f"at most {limit:g}, fails above {fails:g}", figure <= limit, figure <= fails
    )


def at_least(what: str, figure: float, limit: float, unit: str = "x", *, fails: float | None = None) -> Row:
    """A row whose goal is a lower limit; `fails`: the wider one below which the run fails."""
    if fails is None:
        return Row(what, figure, unit, f"at least {limit:g}", figure >= limit, figure >= limit)
    return Row(
        what, figure, unit, f"at least {limit:g}, fails below {fails:g}", figure >= limit, figure >= fails
    )
