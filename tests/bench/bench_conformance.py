"""How long a full check takes against parsing: ``python tests/bench/bench_conformance.py``.

Only ratios count. Every candidate runs once a round, a ratio is taken a round, and the median over rounds is
printed: the machine may slow down and speed up meanwhile. Exit code 1 when a check costs more than its limit.
"""

from __future__ import annotations

import gc
import random
import statistics
import sys
import time
from collections.abc import Callable
from functools import partial
from typing import Any
from uuid import UUID

import orjson
from fhir.resources.R4B.observation import Observation

from fhirgallop.conformance.validator import validate

ROUNDS = 41
BATCH = 10
DIV = '<div xmlns="http://www.w3.org/1999/xhtml"><p>{}</p></div>'
# name of the ratio -> (goal, limit that fails the run)
GOALS = {
    "observation, parsed / loads": (1.0, 1.5),
    "observation, from bytes / loads": (2.0, 3.0),
    "all-new strings / repeated strings": (1.1, 1.5),
    "bundle, parsed / loads": (1.0, 1.5),
    "bundle, from bytes / loads": (2.0, 3.0),
}


def observation(source: random.Random) -> dict[str, Any]:
    """An Observation as a heart examination gives it, about 1.4 KB, its strings new each time."""
    word = "".join(source.choices("abcdefghijklmnopqrstuvwxyz", k=8))
    return {
        "resourceType": "Observation",
        "id": f"exam-{word}",
        "meta": {"lastUpdated": "2026-03-04T10:15:00+01:00"},
        "text": {
            "status": "generated",
            "div": DIV.format(f"Heart murmur {word}: grade 3 of 6, at the apex."),
        },
        "identifier": [{"system": "https://clinic.example/exam", "value": word}],
        "status": "final",
        "category": [
            {
                "coding": [
                    {"system": "http://terminology.hl7.org/CodeSystem/observation-category", "code": "exam"}
                ]
            }
        ],
        "code": {
            "coding": [
                {"system": "http://snomed.info/sct", "code": "88610006", "display": f"Heart murmur {word}"},
                {"system": "https://clinic.example/form", "code": f"hm-{word}"},
            ],
            "text": f"Heart murmur {word}",
        },
        "subject": {"reference": f"Patient/{word}"},
        "encounter": {"reference": f"Encounter/{word}"},
        "effectiveDateTime": "2026-03-04T10:00:00+01:00",
        "issued": "2026-03-04T10:05:00+01:00",
        "performer": [{"reference": f"Practitioner/{word}", "display": f"Dr. {word}"}],
        "bodySite": {
            "coding": [{"system": "http://snomed.info/sct", "code": "62403005"}],
            "text": f"apex {word}",
        },
        "method": {
            "coding": [{"system": "http://snomed.info/sct", "code": "37931006"}],
            "text": "auscultation",
        },
        "component": [
            {
                "code": {
                    "coding": [{"system": "http://snomed.info/sct", "code": "246112005"}],
                    "text": "grade",
                },
                "valueQuantity": {
                    "value": 3,
                    "unit": "1",
                    "system": "http://unitsofmeasure.org",
                    "code": "1",
                },
            },
            {
                "code": {
                    "coding": [{"system": "http://snomed.info/sct", "code": "260864003"}],
                    "text": "timing",
                },
                "valueCodeableConcept": {"text": f"systolic {word}"},
            },
        ],
    }


def bundle(source: random.Random, count: int = 26) -> dict[str, Any]:
    """A transaction of such Observations and the panel that holds them together."""
    entries = []
    members = []
    for _ in range(count):
        url = UUID(int=source.getrandbits(128), version=4).urn
        members.append({"reference": url})
        resource = observation(source)
        entries.append(
            {"fullUrl": url, "resource": resource, "request": {"method": "POST", "url": "Observation"}}
        )
    panel = observation(source)
    del panel["component"]
    panel["hasMember"] = members
    entries.append(
        {
            "fullUrl": UUID(int=source.getrandbits(128), version=4).urn,
            "resource": panel,
            "request": {"method": "POST", "url": "Observation"},
        }
    )
    return {"resourceType": "Bundle", "type": "transaction", "entry": entries}


def interleaved(texts: list[bytes], check: Callable[[Any], object]) -> tuple[float, float, float]:
    """Seconds spent on loads, on the check of what was just parsed, and on the check from bytes."""
    loads = parsed = from_bytes = 0.0
    gc.collect()
    gc.disable()
    for start in range(0, len(texts), BATCH):
        batch = texts[start : start + BATCH]
        t0 = time.perf_counter()
        values = [orjson.loads(text) for text in batch]
        t1 = time.perf_counter()
        for value in values:
            check(value)
        t2 = time.perf_counter()
        for text in batch:
            check(text)
        t3 = time.perf_counter()
        loads, parsed, from_bytes = loads + t1 - t0, parsed + t2 - t1, from_bytes + t3 - t2
    gc.enable()
    return loads, parsed, from_bytes


def measure(edition: str) -> dict[str, float]:
    """The ratios, medians over interleaved rounds."""
    source = random.Random(7)
    check = partial(validate, edition=edition)
    ratios: dict[str, list[float]] = {name: [] for name in GOALS}
    same = [orjson.dumps(observation(source))] * (BATCH * 20)
    for resource in (observation(source), bundle(source)):
        assert not check(resource), [str(issue) for issue in check(resource)][:3]
    for _ in range(ROUNDS):
        texts = [orjson.dumps(observation(source)) for _ in same]
        loads, parsed, from_bytes = interleaved(texts, check)
        _, repeated, _ = interleaved(same, check)
        big = interleaved([orjson.dumps(bundle(source)) for _ in range(4)], check)
        found = (parsed / loads, from_bytes / loads, parsed / repeated, big[1] / big[0], big[2] / big[0])
        for name, ratio in zip(GOALS, found, strict=True):
            ratios[name].append(ratio)
    return {name: statistics.median(found) for name, found in ratios.items()}


def model_library() -> float:
    """How many times longer the general-purpose model library takes for the same Observations (R4B)."""
    source = random.Random(3)
    ratios = []
    for _ in range(9):
        values = [observation(source) for _ in range(50)]
        start = time.perf_counter()
        for value in values:
            Observation.model_validate(value)
        middle = time.perf_counter()
        for value in values:
            validate(value, "R4B")
        ratios.append((middle - start) / (time.perf_counter() - middle))
    return statistics.median(ratios)


def main() -> int:
    """Prints a line a ratio; 1 when one is above its limit."""
    over = 0
    source = random.Random(1)
    print(
        f"observation {len(orjson.dumps(observation(source)))} bytes, "
        f"bundle {len(orjson.dumps(bundle(source)))} bytes"
    )
    for edition in ("R4", "R4B", "R5"):
        for name, ratio in measure(edition).items():
            goal, limit = GOALS[name]
            verdict = "goal met" if ratio <= goal else "within limit" if ratio <= limit else "OVER LIMIT"
            over += ratio > limit
            print(f"{edition:4} {name:40} {ratio:5.2f}   goal {goal}, limit {limit}: {verdict}")
    times = model_library()
    over += times < 25
    print(f"R4B  model library / full check {times:18.0f}   goal at least 50, limit 25")
    return 1 if over else 0


if __name__ == "__main__":
    sys.exit(main())
