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
