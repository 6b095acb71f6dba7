"""A full check against parsing, against the general-purpose model library, and the start of an edition."""

from __future__ import annotations

import random
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from time import perf_counter
from typing import Any

import orjson
from bench_build import MOMENT, exam
from fhir.resources.R4B.observation import Observation
from measuring import Row, at_least, at_most, interleaved, ratio

from fhirgallop.codes import fhirjson
from fhirgallop.conformance.registry import registry
from fhirgallop.conformance.validator import validate
from fhirgallop.observations.bundle import encode

EDITIONS = ("R4", "R4B", "R5")
# many short rounds: on a busy machine, most of them are then not interrupted
ROUNDS, CALLS = 101, 40
DIV = '<div xmlns="http://www.w3.org/1999/xhtml"><p>{}</p></div>'


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


def rows() -> Iterator[Row]:
    """The measured rows; of the editions, the slowest counts."""
    found = [_observation(edition) for edition in EDITIONS]
    worst = {name: max(one[name] for one in found) for name in found[0]}
    yield at_most("full check of a parsed Observation / parsing it", worst["parsed"], 1, fails=1.5)
    yield at_most("Observation from bytes, read and checked / parsing it", worst["bytes"], 2, fails=3.5)
    yield at_most(
        "parse and check Observations with all strings new / one again and again", worst["new"], 1.1
    )
    yield at_least("the model library / full check of a parsed Observation", _models(), 50, fails=25)
    bundles = [_bundle(edition) for edition in EDITIONS]
    worst = {name: max(one[name] for one in bundles) for name in bundles[0]}
    what = f"Bundle as we emit it, 25 entries, {_size() / 1000:.0f} kB"
    yield at_most(f"{what}: full check / parsing it", worst["parsed"], 1, fails=2)
    yield at_most(f"{what}: from bytes, read and checked / parsing it", worst["bytes"], 2, fails=4)
    for step, seconds in _start().items():
        yield at_most(step, seconds, 0.3, "s")


def _observation(edition: str) -> dict[str, float]:
    """Ratios for a single Observation."""
    source = random.Random(7)
    value = observation(source)
    text = orjson.dumps(value)
    assert validate(value, edition) == []
    # the same strings are met again and again, or never twice; both are parsed first, to be as near at hand
    fresh = iter([orjson.dumps(observation(source)) for _ in range(ROUNDS * (CALLS + CALLS // 10 + 1) + 1)])
    times = interleaved(
        {
            "loads": lambda: orjson.loads(text),
            "parsed": lambda: validate(value, edition),
            "new": lambda: validate(orjson.loads(next(fresh)), edition),
            "again": lambda: validate(orjson.loads(text), edition),
            "bytes": lambda: validate(text, edition),
        },
        rounds=ROUNDS,
        calls=CALLS,
    )
    pairs = {"parsed": "loads", "bytes": "loads", "new": "again"}
    return {above: ratio(times, above, below) for above, below in pairs.items()}


def _models() -> float:
    value = observation(random.Random(3))
    times = interleaved(
        {"models": lambda: Observation.model_validate(value), "ours": lambda: validate(value, "R4B")},
        rounds=ROUNDS,
        calls=20,
    )
    return ratio(times, "models", "ours")


def _bundle(edition: str) -> dict[str, float]:
    """Ratios for the Bundle of an examination, with exact decimals as it leaves the encoder."""
    value = encode(exam(), form="json", recorded=MOMENT, edition=edition)
    text = fhirjson.write(value)
    assert validate(value, edition) == []
    times = interleaved(
        {
            "loads": lambda: orjson.loads(text),
            "parsed": lambda: validate(value, edition),
            "bytes": lambda: validate(text, edition),
        },
        rounds=ROUNDS,
        calls=10,
    )
    return {above: ratio(times, above, "loads") for above in ("parsed", "bytes")}


def _size() -> int:
    return len(fhirjson.write(encode(exam(), form="json", recorded=MOMENT)))


def _start() -> dict[str, float]:
    """Seconds that a fresh process needs: an edition loaded, then its first Observation checked."""
    command = [sys.executable, str(Path(__file__).resolve())]
    found = [
        orjson.loads(subprocess.run([*command, e], check=True, capture_output=True).stdout) for e in EDITIONS
    ]
    return {step: max(one[step] for one in found) for step in found[0]}


def _load(edition: str) -> None:
    value: dict[str, Any] = observation(random.Random(1))
    start = perf_counter()
    registry(edition)
    loaded = perf_counter()
    validate(value, edition)
    print(
        orjson.dumps(
            {
                "load an edition": loaded - start,
                "check the first Observation, its type compiled": perf_counter() - loaded,
            }
        ).decode()
    )


if __name__ == "__main__":
    _load(sys.argv[1])
