"""The command line as users call it: a process of its own."""

import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]


def kinetics(*arguments: object, timeout: float = 120.0) -> subprocess.CompletedProcess[str]:
    """Run ``python -m kinetics`` to its end."""
    return subprocess.run(
        [sys.executable, "-m", "kinetics", *map(str, arguments)],
        cwd=ROOT,
        capture_output=True,
        text=True,
        timeout=timeout,
        check=False,
    )
