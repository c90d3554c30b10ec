"""A real Chromium, and the real dashboard as a process of its own."""

import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from urllib.request import urlopen

import pytest
from playwright.sync_api import Browser, Page

from tests.command import kinetics

ROOT = Path(__file__).resolve().parents[2]


@dataclass(frozen=True)
class Dashboard:
    """A running dashboard."""

    address: str
    process: subprocess.Popen[str]


@pytest.fixture
def dashboard() -> Iterator[Callable[..., Dashboard]]:
    """Start dashboards by their command line; all are ended with Ctrl-C and must go."""
    running: list[subprocess.Popen[str]] = []

    def start(*arguments: str) -> Dashboard:
        process = subprocess.Popen(
            [sys.executable, "-m", "dashboard", *arguments, "--no-browser"],
            cwd=ROOT,
            stdout=subprocess.PIPE,
            text=True,
            start_new_session=True,
        )
        running.append(process)
        assert process.stdout is not None
        line = process.stdout.readline()
        assert "http://127.0.0.1:" in line, line
        address = line.split("Dashboard: ")[1].split()[0]
        return Dashboard(address, process)

    yield start
    for process in running:
        process.send_signal(signal.SIGINT)
    for process in running:
        assert process.wait(timeout=30) == 0
        assert process.stdout is not None
        process.stdout.close()


@pytest.fixture(scope="session")
def measured_night(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the logbook of the finished demonstration night, measured once."""
    home = tmp_path_factory.mktemp("night")
    finished = ROOT / "demo_runs" / "finished"
    done = kinetics(
        "watch",
        finished / "run",
        "--sheet",
        finished / "finished.toml",
        "--logbook",
        home / "night.logbook",
        "--once",
    )
    assert done.returncode == 0, done.stderr
    return home


@pytest.fixture
def night(measured_night: Path, tmp_path: Path) -> Path:
    """A copy of it that a test may decide in."""
    return Path(shutil.copytree(measured_night, tmp_path / "books"))


@pytest.fixture
def page(browser: Browser) -> Iterator[Page]:
    """A page that notes every request and every error."""
    context = browser.new_context(viewport={"width": 1440, "height": 900})
    opened = context.new_page()
    hosts: set[str] = set()
    opened.on("request", lambda request: hosts.add(request.url.split("/")[2].split(":")[0]))
    faults: list[str] = []
    opened.on("pageerror", lambda error: faults.append(str(error)))
    yield opened
    context.close()
    assert hosts <= {"127.0.0.1"}, f"the page called out: {hosts}"
    assert not faults


def eventually(condition: Callable[[], bool], seconds: float = 40.0) -> None:
    """Wait until something is true."""
    end = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < end, "waited in vain"
        time.sleep(0.2)


def fetch(address: str) -> str:
    """Return what an address answers."""
    with urlopen(address, timeout=10) as reply:
        return str(reply.read().decode())
