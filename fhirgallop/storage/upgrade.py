"""Carries a database of an earlier form forward, with all it holds, in one transaction."""

from __future__ import annotations

from alembic.operations import Operations
from alembic.runtime.migration import MigrationContext
from sqlalchemy import Engine, update
from sqlalchemy.exc import SQLAlchemyError

from fhirgallop.errors import SettingsError
from fhirgallop.storage.engine import changing_tables, found_version, opening, other_form
from fhirgallop.storage.migrations import STEPS
from fhirgallop.storage.migrations.stored import Keep
from fhirgallop.storage.tables import SCHEMA_VERSION, schema_version


def upgrade(engine: Engine, keep: Keep) -> int:
    """Gives a database today's tables, whole or not at all; of two who try at once, one waits.

    Args:
        engine: from `engine.connect`.
        keep: writes the coded resources of an examination that was kept before resources were.

    Returns:
        The version that was found.

    Raises:
        SettingsError: the database is empty, is newer than this program, or the change failed; then it is
            as it was.
    """
    with opening(), changing_tables(engine) as connection:
        found = found_version(connection)
        if found is None:
            raise SettingsError("the database is empty; `fhirgallop serve` makes its tables")
        if found > SCHEMA_VERSION:
            raise SettingsError(other_form(found))
        try:
            with Operations.context(MigrationContext.configure(connection)) as op:
                for version in range(found + 1, SCHEMA_VERSION + 1):
                    STEPS[version](op, keep)
            connection.execute(update(schema_version).values(version=SCHEMA_VERSION))
        except SQLAlchemyError as error:
            reason = type(getattr(error, "orig", None) or error).__name__
            raise SettingsError(
                f"the tables could not be changed ({reason}); the database is as it was"
            ) from None
    return found
