"""Entries of an examination in plain words."""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType
from typing import Final

from fhirgallop.cards import words
from fhirgallop.exam import catalogue
from fhirgallop.exam.entry import Entry, Qualifier
from fhirgallop.exam.presence import Presence

# sections of the catalogue, in the order in which a heart is examined
SECTIONS: Final[Mapping[str, str]] = MappingProxyType(
    {
        "symptom": "What the patient tells",
        "vital": "Vital signs",
        "pressure": "Blood pressure",
        "general": "General appearance",
        "pulses": "Arteries",
        "rhythm": "Rhythm",
        "jvp": "Jugular veins",
        "palpation": "Palpation of the chest",
        "auscultation": "Auscultation",
        "haemodynamic": "Measurements handed in with the examination",
    }
)


def said(entry: Entry) -> str:
    """What an entry says of its finding, without its properties: `present`, `152 mmHg`, `Regular`."""
    if entry.presence is Presence.PRESENT:
        if entry.measure is not None:
            return words.number(entry.measure)
        if entry.answers:
            return ", ".join(words.answer(entry.finding, answer) for answer in entry.answers)
        if entry.text:
            return entry.text
    return entry.presence.in_words


def properties(entry: Entry) -> tuple[str, ...]:
    """What else was said of it: grade, place, timing, manoeuvres, each in words."""
    return tuple(filter(None, (_property(one) for one in entry.qualifiers)))


def _property(qualifier: Qualifier) -> str:
    if qualifier.grade is not None:
        return f"grade {qualifier.grade}"
    axis = catalogue.load().axes.get(qualifier.axis)
    value = axis.values.get(qualifier.value) if axis else None
    if axis is None or value is None:
        return qualifier.text or qualifier.value
    label = value.label
    # a value that says nothing without the name of its property
    if qualifier.axis.startswith("response.") or qualifier.axis in ("radiation", "suspected-lesion"):
        return f"{axis.label}: {label}"
    return label
