"""What several parts of the tests share."""

import os
import shutil
from collections.abc import Iterator

# As in kinetics/__main__.py: threads of small matrices only wait for each other.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("OMP_NUM_THREADS", "1")

import pytest
from playwright.sync_api import Browser, sync_playwright

# Without these Chromium calls out for updates and fails on closed networks.
FLAGS = [
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
]


@pytest.fixture(scope="session")
def browser() -> Iterator[Browser]:
    """The installed Chromium, one a test process (the driver cannot be started twice in one)."""
    executable = os.environ.get("KETTLEWATCH_CHROMIUM") or shutil.which("chromium")
    assert executable, "these tests need Chromium: apt-get install chromium"
    with sync_playwright() as playwright:
        running = playwright.chromium.launch(executable_path=executable, args=FLAGS)
        yield running
        running.close()
