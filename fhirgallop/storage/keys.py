"""The digests under which patients and encounters stand in the columns of the tables."""

from __future__ import annotations

import hashlib


def patient_key(system: str, value: str) -> str:
    """The same for the same identifier of a patient, not readable as it."""
    return _key("patient", system, value)


def encounter_key(system: str, value: str) -> str:
    """The same for the same identifier of an encounter, not readable as it."""
    return _key("encounter", system, value)


def token_key(system: str, value: str) -> str:
    """The same for the same identifier of a resource."""
    return _key("identifier", system, value)


def number_key(system: str, value: str) -> str:
    """The same for the same number of an examination, whoever's it is."""
    return _key("number", system, value)


def _key(*parts: str) -> str:
    # repr() keeps the parts apart whatever characters they hold
    return hashlib.sha256(repr(parts).encode("utf-8", "replace")).hexdigest()
