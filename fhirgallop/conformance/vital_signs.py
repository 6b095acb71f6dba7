"""Clause: an Observation with a vital-signs code must meet the core's profile for it, named or not.

Source: FHIR R4 "Observation vital signs profile" and its table of codes (LOINC);
the codes are the same in R4B and R5.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from fhirgallop.conformance.profile_tree import SD

LOINC = "http://loinc.org"
PROFILES: Mapping[str, str] = {
    "85353-1": "vitalspanel",
    "9279-1": "resprate",
    "8867-4": "heartrate",
    "2708-6": "oxygensat",
    "8310-5": "bodytemp",
    "8302-2": "bodyheight",
    "9843-4": "headcircum",
    "29463-7": "bodyweight",
    "39156-5": "bmi",
    "85354-9": "bp",
}


def profiles_for(observation: Mapping[Any, Any]) -> Iterator[str]:
    """Canonicals of the profiles that the codes of an Observation ask for."""
    code: Any = observation.get("code")
    codings = code.get("coding") if isinstance(code, Mapping) else None
    for coding in codings if isinstance(codings, list) else ():
        if isinstance(coding, Mapping) and coding.get("system") == LOINC:
            name = PROFILES.get(coding["code"]) if isinstance(coding.get("code"), str) else None
            if name is not None:
                yield SD + name
