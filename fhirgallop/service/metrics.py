"""What is counted, for Prometheus: requests, examinations, cards, deliveries, the database, the audit trail.

Label values are the service's own words (route patterns, map names, rule ids, kinds), never something that a
sender wrote. Each process counts for itself and is scraped for itself.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from typing import Final

from prometheus_client import (
    CollectorRegistry,
    Counter,
    Histogram,
    PlatformCollector,
    ProcessCollector,
    generate_latest,
)
from prometheus_client.core import GaugeMetricFamily, Metric

CONTENT_TYPE: Final = "text/plain; version=0.0.4; charset=utf-8"
_SECONDS: Final = (0.001, 0.0025, 0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1.0, 2.5, 10.0, 60.0)


@dataclass(frozen=True, slots=True)
class Reading:
    """A figure that is read whenever somebody looks.

    Attributes:
        name: without the prefix.
        meaning: one line.
        values: figure by the value of the label; a figure without a label stands under "".
        label: name of the label; empty where there is none.
    """

    name: str
    meaning: str
    values: Mapping[str, float]
    label: str = ""


class Metrics:
    """The counters of one process."""

    def __init__(self) -> None:
        registry = self._registry = CollectorRegistry()
        ProcessCollector(registry=registry)
        PlatformCollector(registry=registry)
        self._requests = Counter(
            "fhirgallop_requests", "Answered requests.", ["method", "route", "status"], registry=registry
        )
        self._seconds = Histogram(
            "fhirgallop_request_seconds", "Time until the answer was out.", ["route"],
            buckets=_SECONDS, registry=registry,
        )  # fmt: skip
        self._exams = Counter(
            "fhirgallop_examinations", "What became of records.", ["map", "result"], registry=registry
        )
        self._rules = Counter(
            "fhirgallop_rules", "What became of what the rules raised.", ["rule", "fate"], registry=registry
        )
        self._feedback = Counter(
            "fhirgallop_card_answers", "What users answered to cards.", ["rule", "outcome"], registry=registry
        )

    def answered(self, method: str, route: str, status: int, seconds: float) -> None:
        """Counts one request."""
        self._requests.labels(method, route, str(status)).inc()
        self._seconds.labels(route).observe(seconds)

    def examination(self, map_name: str, result: str) -> None:
        """Counts one record by what became of it: coded, repeated, refused, unreadable, not-stored."""
        self._exams.labels(map_name, result).inc()

    def raised(self, fates: Mapping[tuple[str, str], int]) -> None:
        """Counts what the rules raised in one call, by rule and fate (shown, or why not)."""
        for (rule, fate), times in fates.items():
            self._rules.labels(rule, fate).inc(times)

    def card_answer(self, rule: str, outcome: str) -> None:
        """Counts one answer to a card: accepted or overridden."""
        self._feedback.labels(rule, outcome).inc()

    def watch(self, read: Callable[[], Iterable[Reading]]) -> None:
        """Publishes what `read` gives whenever somebody looks."""
        self._registry.register(_Readings(read))

    def page(self) -> bytes:
        """All of it in Prometheus' text format 0.0.4. Reads the database: not for the event loop."""
        return generate_latest(self._registry)


class _Readings:
    """A collector, in the library's sense, around a function."""

    def __init__(self, read: Callable[[], Iterable[Reading]]) -> None:
        self._read = read

    def describe(self) -> Iterable[Metric]:
        """Nothing beforehand, so that registering reads nothing."""
        return ()

    def collect(self) -> Iterable[Metric]:
        """The figures of this moment."""
        for reading in self._read():
            labels = [reading.label] if reading.label else []
            family = GaugeMetricFamily(f"fhirgallop_{reading.name}", reading.meaning, labels=labels)
            for of, value in reading.values.items():
                family.add_metric([of] if labels else [], value)
            yield family
