"""Data that others certified, fetched once a session from their own source distributions."""

import subprocess
import sys
import tarfile
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

LMFIT = "lmfit==1.3.4"


@dataclass(frozen=True)
class Certified:
    """A NIST Statistical Reference Dataset (nonlinear regression; public domain)."""

    name: str
    x: np.ndarray
    y: np.ndarray
    parameters: np.ndarray
    standard_deviations: np.ndarray
    residual_sum: float


@pytest.fixture(scope="session")
def nist_folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Folder of the NIST files, from the source distribution of lmfit 1.3.4 (BSD-3)."""
    to = tmp_path_factory.mktemp("nist")
    got = subprocess.run(
        [sys.executable, "-m", "pip", "download", "-q", "--no-deps", "--no-binary", "lmfit", LMFIT],
        cwd=to,
        capture_output=True,
        text=True,
        timeout=150,
        check=False,
    )
    archives = list(to.glob("lmfit-*.tar.gz"))
    assert got.returncode == 0, f"pip could not fetch {LMFIT} with the NIST data: {got.stderr}"
    assert archives
    with tarfile.open(archives[0]) as tar:
        for member in tar.getmembers():
            path = Path(member.name)
            if path.parent.name == "NIST_STRD" and path.suffix == ".dat":
                content = tar.extractfile(member)
                assert content is not None
                (to / path.name).write_bytes(content.read())
    return to


@pytest.fixture(scope="session")
def certified(nist_folder: Path) -> Callable[[str], Certified]:
    """Read one NIST set by name."""
    return lambda name: read_certified(nist_folder / f"{name}.dat")


def read_certified(path: Path) -> Certified:
    """Read certified values and data by the line numbers the file's own header gives."""
    lines = path.read_text(encoding="latin-1").splitlines()
    first, last = _range(lines, "Data")
    data = np.array([[float(v) for v in line.split()] for line in lines[first - 1 : last]])
    first, last = _range(lines, "Certified Values")
    parameters, deviations, residual = [], [], float("nan")
    for line in lines[first - 1 : last]:
        words = line.split()
        if line.strip().startswith("b") and "=" in line:
            parameters.append(float(words[-2]))
            deviations.append(float(words[-1]))
        if line.startswith("Residual Sum of Squares"):
            residual = float(words[-1])
    return Certified(
        path.stem, data[:, 1], data[:, 0], np.array(parameters), np.array(deviations), residual
    )


def _range(lines: list[str], what: str) -> tuple[int, int]:
    for line in lines:
        words = line.split()
        if f"{what} " in line and "(lines" in line:
            at = words.index("(lines")
            return int(words[at + 1]), int(words[at + 3].rstrip(")"))
    raise AssertionError(f"no line range for {what}")
