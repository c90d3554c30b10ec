"""``python -m dashboard [LOGBOOKS_DIR]`` and ``python -m dashboard demo``."""

import argparse
import contextlib
import os
import shutil
import signal
import socket
import subprocess
import sys
import tempfile
import time
import webbrowser
from collections.abc import Sequence
from importlib.resources import files
from pathlib import Path
from types import FrameType
from urllib.error import URLError
from urllib.request import urlopen

from kinetics.version import __version__

_WAIT_S = 60.0
_STAGE_APP = "from dashboard.app import main\n\nmain()\n"


def main(arguments: Sequence[str] | None = None) -> int:
    """Start the dashboard and stay until told to stop; return the exit status."""
    options = _parser().parse_args(arguments)
    demo = str(options.logbooks) == "demo" and not options.logbooks.is_dir()
    with tempfile.TemporaryDirectory(prefix="kettlewatch-") as stage:
        home = Path(stage)
        logbooks = home / "demo" if demo else options.logbooks
        if demo:
            logbooks.mkdir()
        elif not logbooks.is_dir():
            print(f"{logbooks}: there is no such folder of logbooks", file=sys.stderr)
            return 2
        port = options.port or _free_port()
        running: list[subprocess.Popen[bytes]] = []
        stop = _Stop()
        try:
            if demo:
                running += _start_demo(logbooks, options.pace, options.count)
            server = _start_server(home, logbooks, port)
            running.append(server)
            address = f"http://127.0.0.1:{port}"
            if not _answers(address, server, stop):
                print("the dashboard did not start", file=sys.stderr)
                return 0 if stop.asked else 1
            _announce(f"{address}/now?run=demo" if demo else address, demo, options.no_browser)
            while not stop.asked and server.poll() is None:
                time.sleep(0.2)
            return 0 if stop.asked else 1
        finally:
            _end(running)


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="python -m dashboard",
        description="Open the dashboard on this machine (loopback only).",
    )
    parser.add_argument(
        "logbooks",
        type=Path,
        nargs="?",
        default=Path(),
        metavar="LOGBOOKS_DIR",
        help="folder with logbooks (default: this one); 'demo' plays the demo run",
    )
    parser.add_argument("--port", type=int, default=0, help="default: a free one")
    parser.add_argument("--no-browser", action="store_true", help="only print the address")
    parser.add_argument(
        "--pace", type=float, default=1.0, help="demo: seconds between spectra (default 1)"
    )
    parser.add_argument("--count", type=int, default=120, help="demo: spectra (default 120)")
    parser.add_argument("--version", action="version", version=f"Kettlewatch {__version__}")
    return parser


class _Stop:
    """Set by Ctrl-C and SIGTERM."""

    def __init__(self) -> None:
        self.asked = False
        for number in (signal.SIGINT, signal.SIGTERM):
            signal.signal(number, self._ask)

    def _ask(self, _number: int, _frame: FrameType | None) -> None:
        self.asked = True


def _free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def _start_server(home: Path, logbooks: Path, port: int) -> subprocess.Popen[bytes]:
    """Lay out the folder Streamlit serves from, and start it there.

    Plotly's JavaScript comes from the installed plotly package, so that the browser fetches
    nothing from elsewhere.
    """
    static = home / "static"
    static.mkdir()
    script = files("plotly") / "package_data" / "plotly.min.js"
    with script.open("rb") as source, (static / "plotly.min.js").open("wb") as target:
        shutil.copyfileobj(source, target)
    settings = home / ".streamlit"
    settings.mkdir()
    text = (files("dashboard") / "config.toml").read_text(encoding="utf-8")
    (settings / "config.toml").write_text(text, encoding="utf-8")
    (home / "app.py").write_text(_STAGE_APP, encoding="utf-8")
    environment = {**os.environ, "KETTLEWATCH_LOGBOOKS": str(logbooks.resolve())}
    environment.setdefault("OPENBLAS_NUM_THREADS", "1")  # as in kinetics/__main__.py
    environment.setdefault("OMP_NUM_THREADS", "1")
    root = str(Path(__file__).resolve().parent.parent)
    environment["PYTHONPATH"] = os.pathsep.join(
        part for part in (root, os.environ.get("PYTHONPATH", "")) if part
    )
    return subprocess.Popen(
        [sys.executable, "-m", "streamlit", "run", "app.py", "--server.port", str(port)],
        cwd=home,
        env=environment,
        stdin=subprocess.DEVNULL,
        stdout=subprocess.DEVNULL,
        start_new_session=True,
    )


def _start_demo(logbooks: Path, pace_s: float, count: int) -> list[subprocess.Popen[bytes]]:
    """Start the player and the follower of the demo run, and measure the finished night."""
    run_folder, sheet = logbooks / "run", logbooks / "demo.toml"
    run_folder.mkdir()
    player = [sys.executable, "-m", "demo_runs.player", str(run_folder), "--pace", str(pace_s)]
    player += ["--count", str(count), "--sheet", str(sheet)]
    playing = subprocess.Popen(player, stdout=subprocess.DEVNULL, start_new_session=True)
    waited = time.monotonic()
    while not sheet.is_file() and playing.poll() is None and time.monotonic() - waited < _WAIT_S:
        time.sleep(0.05)
    follower = [sys.executable, "-m", "kinetics", "watch", str(run_folder), "--sheet", str(sheet)]
    follower += ["--logbook", str(logbooks / "demo.logbook"), "--every", "0.5"]
    following = subprocess.Popen(
        follower, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, start_new_session=True
    )
    night = files("demo_runs") / "finished"
    finished = [sys.executable, "-m", "kinetics", "watch", str(night / "run"), "--once"]
    finished += ["--sheet", str(night / "finished.toml")]
    finished += ["--logbook", str(logbooks / "finished-night.logbook")]
    measuring = subprocess.Popen(
        finished, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, start_new_session=True
    )
    return [playing, following, measuring]


def _answers(address: str, server: subprocess.Popen[bytes], stop: _Stop) -> bool:
    """Wait until the server answers."""
    begun = time.monotonic()
    while time.monotonic() - begun < _WAIT_S and not stop.asked and server.poll() is None:
        try:
            with urlopen(f"{address}/_stcore/health", timeout=2) as reply:
                if reply.status == 200:
                    return True
        except (URLError, OSError):
            time.sleep(0.1)
    return False


def _announce(address: str, demo: bool, no_browser: bool) -> None:
    what = "The demo run is playing. " if demo else ""
    print(f"{what}Dashboard: {address}   (Ctrl-C ends it)", flush=True)
    if not no_browser:
        with contextlib.suppress(webbrowser.Error):
            webbrowser.open(address)


def _end(running: Sequence[subprocess.Popen[bytes]]) -> None:
    """End what was started here, gently first."""
    for process in running:
        if process.poll() is None:
            process.terminate()
    for process in running:
        try:
            process.wait(timeout=8)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait()


if __name__ == "__main__":
    sys.exit(main())
