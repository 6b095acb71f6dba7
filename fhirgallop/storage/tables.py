"""The tables, as the newest migration leaves them.

Moments that are compared by the database are milliseconds since 1970 (UTC); those that are only shown are
FHIR instants. Patients, encounters and callers stand in columns of their own as digests only.
"""

from __future__ import annotations

from typing import Final

from sqlalchemy import (
    BigInteger,
    Boolean,
    Column,
    ForeignKey,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    String,
    Table,
    UniqueConstraint,
)

from fhirgallop.storage.packing import Packed

SCHEMA_VERSION: Final = 2

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
    # digest of the patient's identifier: to find, and to delete, all that is kept of one patient
    Column("patient", String(64), nullable=False),
    # digest of the sender's number of the examination: to notice the same number under another patient
    Column("number", String(64), nullable=False),
    Column("received", String(35), nullable=False),
    Column("bundle", Packed, nullable=False),
    Index("submissions_patient", "patient"),
    Index("submissions_number", "number"),
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
    # FHIR instant
    Column("at", String(35), nullable=False),
    Index("hook_instances_patient", "patient"),
    Index("hook_instances_at", "at"),
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
    Index("hook_cards_at", "at"),
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

# One row a version of a coded resource, as the FHIR addresses give it out. Versions are never changed;
# `current` moves to the newest one.
resources = Table(
    "resources",
    metadata,
    # also the order of change: pages of a search and of a history follow it
    Column("id", Integer, primary_key=True, autoincrement=True),
    Column("edition", String(4), nullable=False),
    Column("type", String(64), nullable=False),
    Column("fhir_id", String(64), nullable=False),
    Column("version", Integer, nullable=False),
    Column("current", Boolean, nullable=False),
    Column("deleted", Boolean, nullable=False),
    Column("updated", BigInteger, nullable=False),
    Column("patient", String(64), nullable=False),
    Column("encounter", String(64), nullable=False),
    # id of the catalogue's finding; empty for what is no finding of ours
    Column("finding", String(200), nullable=False),
    # first and last moment that the resource's date may mean; both empty where it has none
    Column("date_from", BigInteger, nullable=True),
    Column("date_to", BigInteger, nullable=True),
    # the examination's version it came with; empty for what came over a FHIR address
    Column("submission", Integer, ForeignKey("submissions.id", ondelete="CASCADE"), nullable=True),
    # without id, versionId and lastUpdated, which stand in the columns
    Column("body", LargeBinary, nullable=False),
    UniqueConstraint("fhir_id", "type", "edition", "version", name="resources_version"),
    # to delete all of one patient, and to find what is kept of one
    Index("resources_patient", "patient", "edition", "type"),
    Index("resources_submission", "submission"),
)

# Digests of identifiers (system and value) by which a resource may be asked for, beside its own id.
resource_identifiers = Table(
    "resource_identifiers",
    metadata,
    Column("resource", Integer, ForeignKey("resources.id", ondelete="CASCADE"), primary_key=True),
    Column("token", String(64), primary_key=True),
    Index("resource_identifiers_token", "token"),
)

# Template maps as they were used: a version, once used, is never another.
maps = Table(
    "maps",
    metadata,
    Column("name", String(200), primary_key=True),
    Column("version", String(200), primary_key=True),
    Column("digest", String(64), nullable=False),
    Column("text", LargeBinary, nullable=False),
    Column("first_used", String(35), nullable=False),
)

# What is still to be sent to the record system, and what became of what was sent.
outbox = Table(
    "outbox",
    metadata,
    # also the order in which a patient's deliveries leave
    Column("id", Integer, primary_key=True, autoincrement=True),
    Column("destination", String(200), nullable=False),
    Column("submission", Integer, ForeignKey("submissions.id", ondelete="CASCADE"), nullable=False),
    Column("exam", String(45), nullable=False),
    Column("patient", String(64), nullable=False),
    # waiting, sending, delivered, failed (wants a person), dropped (a person gave it up)
    Column("state", String(12), nullable=False),
    Column("attempts", Integer, nullable=False),
    Column("created", BigInteger, nullable=False),
    Column("due", BigInteger, nullable=False),
    Column("worker", String(64), nullable=False),
    Column("lease", BigInteger, nullable=False),
    Column("reason", String(500), nullable=False),
    # status, location and outcome of each entry, as JSON; empty before there is an answer
    Column("outcome", LargeBinary, nullable=True),
    Index("outbox_due", "state", "due"),
    Index("outbox_patient", "patient", "state"),
    Index("outbox_submission", "submission"),
)

# How each destination fares, for all workers: after failures in a row nobody asks it before `open_until`.
destinations = Table(
    "destinations",
    metadata,
    Column("name", String(200), primary_key=True),
    Column("failures", Integer, nullable=False),
    Column("open_until", BigInteger, nullable=False),
)

# AuditEvent resources; only ever added to.
audit = Table(
    "audit",
    metadata,
    Column("id", Integer, primary_key=True, autoincrement=True),
    Column("at", BigInteger, nullable=False),
    Column("patient", String(64), nullable=False),
    Column("event", LargeBinary, nullable=False),
    Index("audit_at", "at"),
    Index("audit_patient", "patient"),
)

# Tokens that were used, until they expire: the same one is not taken twice.
used_tokens = Table(
    "used_tokens",
    metadata,
    Column("token", String(64), primary_key=True),
    Column("until", BigInteger, nullable=False),
    Index("used_tokens_until", "until"),
)

# Answers by the sender's own key: the same request sent again gets the same answer, and does nothing.
idempotent_answers = Table(
    "idempotent_answers",
    metadata,
    Column("key", String(64), primary_key=True),
    Column("request", String(64), nullable=False),
    Column("at", BigInteger, nullable=False),
    Column("status", Integer, nullable=False),
    Column("media_type", String(100), nullable=False),
    Column("headers", LargeBinary, nullable=False),
    Column("answer", Packed, nullable=False),
    Column("patient", String(64), nullable=False),
    Index("idempotent_answers_at", "at"),
    Index("idempotent_answers_patient", "patient"),
)

# Many examinations in one request, coded after it was answered.
batches = Table(
    "batches",
    metadata,
    Column("id", String(36), primary_key=True),
    Column("owner", String(64), nullable=False),
    # waiting, coding, done, cancelled
    Column("state", String(12), nullable=False),
    Column("created", BigInteger, nullable=False),
    Column("worker", String(64), nullable=False),
    Column("lease", BigInteger, nullable=False),
    Column("wish", LargeBinary, nullable=False),
    Column("request", Packed, nullable=False),
    Column("total", Integer, nullable=False),
    Column("done", Integer, nullable=False),
    Index("batches_state", "state", "lease"),
)

# One row an examination of a batch that was gone through.
batch_results = Table(
    "batch_results",
    metadata,
    Column("batch", String(36), ForeignKey("batches.id", ondelete="CASCADE"), primary_key=True),
    Column("position", Integer, primary_key=True),
    # coded, refused, unreadable
    Column("status", String(12), nullable=False),
    Column("patient", String(64), nullable=False),
    # where its Bundle is kept; empty where there is none, or none any more
    Column("submission", Integer, ForeignKey("submissions.id", ondelete="SET NULL"), nullable=True),
    # without the Bundle
    Column("result", LargeBinary, nullable=False),
    Index("batch_results_patient", "patient"),
    Index("batch_results_submission", "submission"),
)

# People signed in to the pages.
sessions = Table(
    "sessions",
    metadata,
    Column("session", String(64), primary_key=True),
    Column("subject", String(64), nullable=False),
    Column("roles", String(200), nullable=False),
    Column("until", BigInteger, nullable=False),
    Index("sessions_until", "until"),
)

# An informatician's work on a map before it is published; every change is a step, so that it can be undone.
drafts = Table(
    "drafts",
    metadata,
    Column("id", String(36), primary_key=True),
    Column("title", String(200), nullable=False),
    # where the clinic's numbers belong, and its time zone: what suggestions for the record's parts need
    Column("address", String(200), nullable=False),
    Column("zone", String(64), nullable=False),
    # the step that counts; later ones were undone
    Column("step", Integer, nullable=False),
    Column("changed", BigInteger, nullable=False),
    # what a data dictionary says of the fields, as JSON; no patient's data
    Column("dictionary", LargeBinary, nullable=False),
)

draft_steps = Table(
    "draft_steps",
    metadata,
    Column("draft", String(36), ForeignKey("drafts.id", ondelete="CASCADE"), primary_key=True),
    Column("step", Integer, primary_key=True),
    Column("did", String(200), nullable=False),
    Column("text", LargeBinary, nullable=False),
)

# Sample records as they were brought in: patients' data, until they are deleted.
draft_samples = Table(
    "draft_samples",
    metadata,
    Column("id", Integer, primary_key=True, autoincrement=True),
    Column("draft", String(36), ForeignKey("drafts.id", ondelete="CASCADE"), nullable=False),
    Column("media_type", String(100), nullable=False),
    Column("content", LargeBinary, nullable=False),
    Column("at", BigInteger, nullable=False),
    Index("draft_samples_draft", "draft"),
    Index("draft_samples_at", "at"),
)

# Which version of a map is in use since when, by whom and why; only ever added to. The texts are in `maps`.
publications = Table(
    "publications",
    metadata,
    # the newest row of a name that is in use counts
    Column("id", Integer, primary_key=True, autoincrement=True),
    Column("name", String(200), nullable=False),
    Column("version", String(200), nullable=False),
    # publish, or back to an earlier version
    Column("kind", String(12), nullable=False),
    # waiting (for a second person), approved or declined by one, used
    Column("state", String(12), nullable=False),
    Column("author", String(200), nullable=False),
    # who that was, as a digest: nobody approves what is his own
    Column("author_key", String(64), nullable=False),
    Column("approver", String(200), nullable=False),
    Column("note", String(2000), nullable=False),
    # the check at publishing, as JSON: counts, no patient's data
    Column("checked", LargeBinary, nullable=False),
    Column("at", String(35), nullable=False),
    Index("publications_name", "name", "state"),
)

# How often each rule was raised in a month, and what became of it; no patient's data.
rule_months = Table(
    "rule_months",
    metadata,
    # 2026-12
    Column("month", String(7), primary_key=True),
    Column("rule", String(200), primary_key=True),
    # shown, or why not
    Column("fate", String(32), primary_key=True),
    Column("count", Integer, nullable=False),
)
