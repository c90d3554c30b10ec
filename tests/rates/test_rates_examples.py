"""The examples in the docstrings run."""

import doctest
import importlib

import pytest

MODULES = ("series", "words", "scheme", "across", "orders", "fitting", "study")


@pytest.mark.parametrize("name", MODULES)
def test_examples(name: str) -> None:
    module = importlib.import_module(f"kinetics.rates.{name}")
    found = doctest.testmod(module, optionflags=doctest.NORMALIZE_WHITESPACE)
    assert found.attempted > 0
    assert found.failed == 0
