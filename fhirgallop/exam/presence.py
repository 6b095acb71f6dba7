"""Presence: what the examiner said of a finding. What nobody said is unknown, and has no entry at all."""

from __future__ import annotations

from enum import StrEnum


class Presence(StrEnum):
    """The five things an examiner can say of a finding."""

    PRESENT = "present"
    ABSENT = "absent"
    UNCERTAIN = "uncertain"
    NOT_EXAMINED = "not-examined"
    NOT_EXAMINABLE = "not-examinable"

    @property
    def looked_for(self) -> bool:
        """True when the examiner looked and came to a view."""
        return self in (Presence.PRESENT, Presence.ABSENT, Presence.UNCERTAIN)

    @property
    def in_words(self) -> str:
        """As it is said to a person, within a sentence."""
        return "could not be examined" if self is Presence.NOT_EXAMINABLE else self.value.replace("-", " ")
