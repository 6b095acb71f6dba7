"""The steps from each released form of the tables to the next.

A new database gets its tables as `storage/tables.py` has them; an old one is carried forward step by step.
A step that was released is never changed: it describes tables in words of its own, with none of today's.
A new form of the tables is a new step here, the same change in `tables.py`, and the next `SCHEMA_VERSION`; a
test holds the two ways against each other.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from types import MappingProxyType
from typing import Final

from alembic.operations import Operations

from fhirgallop.storage.migrations import step_2
from fhirgallop.storage.migrations.stored import Keep

# Version of the tables -> the step that leads to it from the version before.
STEPS: Final[Mapping[int, Callable[[Operations, Keep], None]]] = MappingProxyType({2: step_2.upgrade})
