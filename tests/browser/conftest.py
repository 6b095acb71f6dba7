"""A service in a process of its own, a browser that knows no other host, and a judge of accessibility.

The judge is axe-core (vendor/), a published library that holds pages against WCAG 2.2.
"""

from __future__ import annotations

import os
import shutil
import socket
import subprocess
import sys
import time
import urllib.error
import urllib.request
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest
from playwright.sync_api import Browser, BrowserContext, Page, sync_playwright

CHROMIUM = shutil.which("chromium")
FLAGS = [
    "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--disable-background-networking",
    "--disable-component-update", "--disable-sync", "--disable-dev-shm-usage",
]  # fmt: skip
AXE = Path(__file__).parent / "vendor" / "axe.min.js"
RULES = ["wcag2a", "wcag2aa", "wcag21a", "wcag21aa", "wcag22aa"]


@dataclass(frozen=True)
class Site:
    """A running service: its address and the folder it keeps things in."""

    address: str
    folder: Path


def _free_port() -> int:
    with socket.socket() as one:
        one.bind(("127.0.0.1", 0))
        port: int = one.getsockname()[1]
        return port


def _wait(address: str, process: subprocess.Popen[bytes]) -> None:
    for _ in range(600):
        if process.poll() is not None:
            raise RuntimeError(f"the service ended with {process.returncode}")
        try:
            with urllib.request.urlopen(f"{address}/health", timeout=2):
                return
        except (urllib.error.URLError, OSError):
            time.sleep(0.1)
    raise TimeoutError(address)


@pytest.fixture(scope="module")
def site(
    request: pytest.FixtureRequest, root: Path, tmp_path_factory: pytest.TempPathFactory
) -> Iterator[Site]:
    """The service on a port of its own, with the example maps and an embedded database.

    A module may name further settings in `SETTINGS`.
    """
    folder = tmp_path_factory.mktemp("site")
    shutil.copytree(root / "examples" / "informatician", folder / "maps")
    address = f"http://127.0.0.1:{(port := _free_port())}"
    settings = {
        "PORT": str(port), "MAPS": str(folder / "maps"), "DATABASE": f"sqlite:///{folder}/kept.sqlite3",
        "BATCH_WORKERS": "0", "DURABLE": "false",
    }  # fmt: skip
    environment = {k: v for k, v in os.environ.items() if not k.startswith("FHIRGALLOP_")}
    settings |= getattr(request.module, "SETTINGS", {})
    environment |= {f"FHIRGALLOP_{name}": value for name, value in settings.items()}
    with (folder / "log.txt").open("wb") as log:
        process = subprocess.Popen(
            [sys.executable, "-m", "fhirgallop", "serve"], env=environment, stdout=log, stderr=log
        )
        try:
            _wait(address, process)
            yield Site(address, folder)
        finally:
            process.terminate()
            process.wait(30)


@pytest.fixture(scope="module")  # its event loop must be gone before tests that run one of their own
def chromium() -> Iterator[Browser]:
    """The browser."""
    if CHROMIUM is None:
        pytest.skip("there is no chromium on this machine; .ci/run installs it")
    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=CHROMIUM, args=FLAGS)
        yield browser
        browser.close()


@pytest.fixture
def visit(chromium: Browser, site: Site) -> Iterator[Callable[..., Page]]:
    """Opens a page of the service: `visit(path, width=360, dark=True, script=False)`.

    At the end no page may have asked another host, or broken what it may load.
    """
    contexts: list[BrowserContext] = []
    wrong: list[str] = []

    def open_page(path: str = "/", *, width: int = 1280, dark: bool = False, script: bool = True) -> Page:
        context = chromium.new_context(
            base_url=site.address, viewport={"width": width, "height": 900},
            color_scheme="dark" if dark else "light", java_script_enabled=script,
        )  # fmt: skip
        contexts.append(context)
        page = context.new_page()
        page.set_default_timeout(30_000)
        page.on("console", lambda said: wrong.append(said.text) if "Content Security" in said.text else None)
        page.on("pageerror", lambda error: wrong.append(str(error)))
        page.on(
            "request",
            lambda asked: (
                wrong.append(asked.url) if not asked.url.startswith(("data:", site.address)) else None
            ),
        )
        page.goto(path)
        return page

    yield open_page
    for context in contexts:
        context.close()
    assert wrong == []


@pytest.fixture
def accessible() -> Callable[[Page], list[str]]:
    """What axe-core finds wrong with a page as it stands: rule and place."""

    def judge(page: Page) -> list[str]:
        # over the debugger: the page's own policy lets no other script in
        page.evaluate(AXE.read_text(encoding="utf-8"))
        found = page.evaluate(
            "rules => axe.run(document, {runOnly: {type: 'tag', values: rules}})"
            ".then(found => found.violations.map("
            "one => one.id + ': ' + one.nodes.map(n => n.target).join(' ')))",
            RULES,
        )
        return [str(one) for one in found]

    return judge
