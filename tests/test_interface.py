"""The interface for notebooks: what it names is there, and its example runs."""

import doctest
import subprocess
import sys

import pytest

import kinetics
from tests.command import ROOT


def test_the_example_runs() -> None:
    done = doctest.testmod(kinetics)
    assert done.attempted > 0
    assert done.failed == 0


@pytest.mark.parametrize("name", kinetics.__all__)
def test_every_name_is_there(name: str) -> None:
    assert getattr(kinetics, name) is not None


def test_an_unknown_name() -> None:
    with pytest.raises(AttributeError, match="nonsense"):
        _ = kinetics.nonsense


def test_importing_is_light() -> None:
    code = "import sys, kinetics; sys.exit('numpy' in sys.modules or 'scipy' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], cwd=ROOT, check=False).returncode == 0
