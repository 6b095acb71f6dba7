"""The tables. `schema_version` tells which form of them a database has."""

from __future__ import annotations

from typing import Final

from sqlalchemy import (
    Boolean,
    Column,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    String,
    Table,
    UniqueConstraint,
)

SCHEMA_VERSION: Final = 1

metadata = MetaData()

schema_version = Table("schema_version", metadata, Column("version", Integer, primary_key=True))

# One row an accepted version of an examination; the newest counts. Each way of writing it (edition, SNOMED
# CT or not) has versions of its own: asking for another edition is no change of the examination.
submissions = Table(
    "submissions",
    metadata,
    Column("id", Integer, primary_key=True, autoincrement=True),
    # identity of the examination: derived from patient and examination number, not readable as either
    Column("exam", String(45), nullable=False),
    Column("edition", String(4), nullable=False),
    Column("snomed", Boolean, nullable=False),
    Column("version", Integer, nullable=False),
    Column("map_name", String(200), nullable=False),
    Column("map_version", String(200), nullable=False),
    Column("record_hash", String(64), nullable=False),
    Column("received", String(35), nullable=False),
    Column("bundle", LargeBinary, nullable=False),
    UniqueConstraint("exam", "edition", "snomed", "version", name="submissions_exam_version"),
    Index("submissions_received", "received"),
)

# What was shown and answered for one patient: digests and rule ids, no findings.
hook_memories = Table(
    "hook_memories",
    metadata,
    Column("patient", String(64), primary_key=True),
    Column("version", Integer, nullable=False),
    Column("memory", LargeBinary, nullable=False),
)

# The memory as it was when a hook fired, so that the same hookInstance is answered alike again.
hook_instances = Table(
    "hook_instances",
    metadata,
    Column("instance", String(64), primary_key=True),
    Column("patient", String(64), nullable=False),
    Column("memory", LargeBinary, nullable=False),
    Index("hook_instances_patient", "patient"),
)

# One row a card that was given out, so that an answer to it is understood later.
hook_cards = Table(
    "hook_cards",
    metadata,
    Column("card", String(36), primary_key=True),
    Column("service", String(64), nullable=False),
    Column("patient", String(64), nullable=False),
    Column("encounter", String(64), nullable=False),
    Column("shown", LargeBinary, nullable=False),
    Column("at", String(35), nullable=False),
    Index("hook_cards_patient", "patient"),
)

# What clients reported; only ever added to. `comment` may hold what a user wrote of a patient.
hook_feedback = Table(
    "hook_feedback",
    metadata,
    Column("id", Integer, primary_key=True, autoincrement=True),
    Column("key", String(64), nullable=False, unique=True),
    Column("service", String(64), nullable=False),
    Column("card", String(36), nullable=False),
    # False for a card that is not known here: clients keep cards longer than we may
    Column("matched", Boolean, nullable=False),
    Column("outcome", String(16), nullable=False),
    Column("suggestions", LargeBinary, nullable=False),
    Column("reason", String(4000), nullable=False),
    Column("reason_system", String(4000), nullable=False),
    Column("comment", String(4000), nullable=False),
    Column("at", String(40), nullable=False),
    Column("received", String(35), nullable=False),
    Index("hook_feedback_card", "card"),
)
