"""The example records and their map, for the tests of the command line."""

from __future__ import annotations

from pathlib import Path

import pytest


@pytest.fixture(scope="session")
def ehr(root: Path) -> Path:
    """Folder with the example records."""
    return root / "examples/ehr"


@pytest.fixture(scope="session")
def fernwood(root: Path) -> Path:
    """The map of the example records."""
    return root / "examples/informatician/fernwood-heart-form.yaml"
