"""Version 2: coded resources, maps, the outbox, audit, tokens, answers by key, batches, sessions.

A submission knows its patient by digest: that of the identifier which its Bundle's report names. The memories
of the CDS Hooks services know when they were kept; those of version 1 count as old.
"""

from __future__ import annotations

import hashlib
import json
from typing import Any, Final

from alembic.operations import Operations
from sqlalchemy import (
    BigInteger,
    Boolean,
    Column,
    Connection,
    ForeignKey,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    String,
    Table,
    UniqueConstraint,
    bindparam,
    column,
    select,
    table,
    text,
    update,
)

from fhirgallop.storage.migrations.stored import Keep, Stored

_AT_ONCE: Final = 100
_metadata = MetaData()

# here only for what refers to it
Table("submissions", _metadata, Column("id", Integer, primary_key=True))


Table(
    "resources",
    _metadata,
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
    Column("finding", String(200), nullable=False),
    Column("date_from", BigInteger, nullable=True),
    Column("date_to", BigInteger, nullable=True),
    Column("submission", Integer, ForeignKey("submissions.id", ondelete="CASCADE"), nullable=True),
    Column("body", LargeBinary, nullable=False),
    UniqueConstraint("fhir_id", "type", "edition", "version", name="resources_version"),
    Index("resources_patient", "patient", "edition", "type"),
    Index("resources_submission", "submission"),
)

Table(
    "resource_identifiers",
    _metadata,
    Column("resource", Integer, ForeignKey("resources.id", ondelete="CASCADE"), primary_key=True),
    Column("token", String(64), primary_key=True),
    Index("resource_identifiers_token", "token"),
)

Table(
    "maps",
    _metadata,
    Column("name", String(200), primary_key=True),
    Column("version", String(200), primary_key=True),
    Column("digest", String(64), nullable=False),
    Column("text", LargeBinary, nullable=False),
    Column("first_used", String(35), nullable=False),
)

Table(
    "outbox",
    _metadata,
    Column("id", Integer, primary_key=True, autoincrement=True),
    Column("destination", String(200), nullable=False),
    Column("submission", Integer, ForeignKey("submissions.id", ondelete="CASCADE"), nullable=False),
    Column("exam", String(45), nullable=False),
    Column("patient", String(64), nullable=False),
    Column("state", String(12), nullable=False),
    Column("attempts", Integer, nullable=False),
    Column("created", BigInteger, nullable=False),
    Column("due", BigInteger, nullable=False),
    Column("worker", String(64), nullable=False),
    Column("lease", BigInteger, nullable=False),
    Column("reason", String(500), nullable=False),
    Column("outcome", LargeBinary, nullable=True),
    Index("outbox_due", "state", "due"),
    Index("outbox_patient", "patient", "state"),
    Index("outbox_submission", "submission"),
)

Table(
    "destinations",
    _metadata,
    Column("name", String(200), primary_key=True),
    Column("failures", Integer, nullable=False),
    Column("open_until", BigInteger, nullable=False),
)

Table(
    "audit",
    _metadata,
    Column("id", Integer, primary_key=True, autoincrement=True),
    Column("at", BigInteger, nullable=False),
    Column("patient", String(64), nullable=False),
    Column("event", LargeBinary, nullable=False),
    Index("audit_at", "at"),
    Index("audit_patient", "patient"),
)

Table(
    "used_tokens",
    _metadata,
    Column("token", String(64), primary_key=True),
    Column("until", BigInteger, nullable=False),
    Index("used_tokens_until", "until"),
)

Table(
    "idempotent_answers",
    _metadata,
    Column("key", String(64), primary_key=True),
    Column("request", String(64), nullable=False),
    Column("at", BigInteger, nullable=False),
    Column("status", Integer, nullable=False),
    Column("media_type", String(100), nullable=False),
    Column("headers", LargeBinary, nullable=False),
    Column("answer", LargeBinary, nullable=False),
    Column("patient", String(64), nullable=False),
    Index("idempotent_answers_at", "at"),
    Index("idempotent_answers_patient", "patient"),
)

Table(
    "batches",
    _metadata,
    Column("id", String(36), primary_key=True),
    Column("owner", String(64), nullable=False),
    Column("state", String(12), nullable=False),
    Column("created", BigInteger, nullable=False),
    Column("worker", String(64), nullable=False),
    Column("lease", BigInteger, nullable=False),
    Column("wish", LargeBinary, nullable=False),
    Column("request", LargeBinary, nullable=False),
    Column("total", Integer, nullable=False),
    Column("done", Integer, nullable=False),
    Index("batches_state", "state", "lease"),
)

Table(
    "batch_results",
    _metadata,
    Column("batch", String(36), ForeignKey("batches.id", ondelete="CASCADE"), primary_key=True),
    Column("position", Integer, primary_key=True),
    Column("status", String(12), nullable=False),
    Column("patient", String(64), nullable=False),
    Column("submission", Integer, ForeignKey("submissions.id", ondelete="SET NULL"), nullable=True),
    Column("result", LargeBinary, nullable=False),
    Index("batch_results_patient", "patient"),
    Index("batch_results_submission", "submission"),
)

Table(
    "sessions",
    _metadata,
    Column("session", String(64), primary_key=True),
    Column("subject", String(64), nullable=False),
    Column("roles", String(200), nullable=False),
    Column("until", BigInteger, nullable=False),
    Index("sessions_until", "until"),
)

Table(
    "drafts",
    _metadata,
    Column("id", String(36), primary_key=True),
    Column("title", String(200), nullable=False),
    Column("address", String(200), nullable=False),
    Column("zone", String(64), nullable=False),
    Column("step", Integer, nullable=False),
    Column("changed", BigInteger, nullable=False),
    Column("dictionary", LargeBinary, nullable=False),
)

Table(
    "draft_steps",
    _metadata,
    Column("draft", String(36), ForeignKey("drafts.id", ondelete="CASCADE"), primary_key=True),
    Column("step", Integer, primary_key=True),
    Column("did", String(200), nullable=False),
    Column("text", LargeBinary, nullable=False),
)

Table(
    "draft_samples",
    _metadata,
    Column("id", Integer, primary_key=True, autoincrement=True),
    Column("draft", String(36), ForeignKey("drafts.id", ondelete="CASCADE"), nullable=False),
    Column("media_type", String(100), nullable=False),
    Column("content", LargeBinary, nullable=False),
    Column("at", BigInteger, nullable=False),
    Index("draft_samples_draft", "draft"),
    Index("draft_samples_at", "at"),
)

Table(
    "publications",
    _metadata,
    Column("id", Integer, primary_key=True, autoincrement=True),
    Column("name", String(200), nullable=False),
    Column("version", String(200), nullable=False),
    Column("kind", String(12), nullable=False),
    Column("state", String(12), nullable=False),
    Column("author", String(200), nullable=False),
    Column("author_key", String(64), nullable=False),
    Column("approver", String(200), nullable=False),
    Column("note", String(2000), nullable=False),
    Column("checked", LargeBinary, nullable=False),
    Column("at", String(35), nullable=False),
    Index("publications_name", "name", "state"),
)

Table(
    "rule_months",
    _metadata,
    Column("month", String(7), primary_key=True),
    Column("rule", String(200), primary_key=True),
    Column("fate", String(32), primary_key=True),
    Column("count", Integer, nullable=False),
)


def upgrade(op: Operations, keep: Keep) -> None:
    """Adds the tables, and fills in of what is kept already all that its Bundles tell."""
    connection = op.get_bind()
    _metadata.create_all(connection)
    # a default for the rows that are there, taken away again below
    for name, kind in (("patient", String(64)), ("number", String(64))):
        op.add_column("submissions", Column(name, kind, nullable=False, server_default=text("''")))
    op.add_column("hook_instances", Column("at", String(35), nullable=False, server_default=text("''")))
    _fill(connection, keep)
    with op.batch_alter_table("submissions") as batch:
        batch.alter_column("patient", existing_type=String(64), server_default=None)
        batch.alter_column("number", existing_type=String(64), server_default=None)
    with op.batch_alter_table("hook_instances") as batch:
        batch.alter_column("at", existing_type=String(35), server_default=None)
    op.create_index("submissions_patient", "submissions", ["patient"])
    op.create_index("submissions_number", "submissions", ["number"])
    op.create_index("hook_instances_at", "hook_instances", ["at"])
    op.create_index("hook_cards_at", "hook_cards", ["at"])


def _fill(connection: Connection, keep: Keep) -> None:
    """The patient of each submission, and its coded resources; in the order in which they came."""
    names = ("id", "edition", "received", "bundle", "patient")
    kept = table("submissions", *(column(name) for name in names))
    query = select(kept.c.id, kept.c.edition, kept.c.received, kept.c.bundle)
    query = query.where(kept.c.id > bindparam("after")).order_by(kept.c.id).limit(_AT_ONCE)
    change = update(kept).where(kept.c.id == bindparam("row")).values(patient=bindparam("whose"))
    after = 0
    while rows := connection.execute(query, {"after": after}).all():
        values = [{"row": row.id, "whose": _patient(json.loads(row.bundle))} for row in rows]
        connection.execute(change, values)
        for row in rows:
            keep(connection, Stored(row.id, row.edition, row.received, row.bundle))
        after = rows[-1].id


def _patient(bundle: dict[str, Any]) -> str:
    for entry in bundle["entry"]:
        resource = entry["resource"]
        if resource["resourceType"] == "DiagnosticReport":
            identifier = resource["subject"]["identifier"]
            parts = ("patient", identifier.get("system", ""), identifier.get("value", ""))
            return hashlib.sha256(repr(parts).encode("utf-8", "replace")).hexdigest()
    return ""
