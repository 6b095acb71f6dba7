"""Fixtures that every test may use, and the rule that nothing is skipped in CI."""

from __future__ import annotations

import os
from datetime import UTC, datetime
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent


@pytest.fixture(scope="session")
def root() -> Path:
    """Top folder of the checkout."""
    return ROOT


@pytest.fixture(scope="session")
def shared() -> Path:
    """Folder beside the checkout with evidence and real data; tests skip where it is absent."""
    folder = ROOT.parent / "shared"
    if not folder.is_dir():
        pytest.skip("the folder with evidence and real data does not lie beside this checkout")
    return folder


@pytest.fixture(scope="session")
def moment() -> datetime:
    """A fixed moment of conversion, so that output can be compared byte for byte."""
    return datetime(2026, 12, 1, 8, 30, tzinfo=UTC)


def pytest_terminal_summary(terminalreporter: pytest.TerminalReporter) -> None:
    """Says loudly what was skipped where nothing may be."""
    if os.environ.get("CI") and terminalreporter.stats.get("skipped"):
        terminalreporter.write_line("CI: no test may be skipped for a missing part", red=True)


def pytest_sessionfinish(session: pytest.Session) -> None:
    """In CI a skipped test is a failure: something that should be installed is missing."""
    reporter = session.config.pluginmanager.get_plugin("terminalreporter")
    if os.environ.get("CI") and reporter and reporter.stats.get("skipped") and session.exitstatus == 0:
        session.exitstatus = pytest.ExitCode.TESTS_FAILED
