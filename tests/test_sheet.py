"""The run sheet: every mistake names the file, the key, what was expected, and the nearest key."""

from pathlib import Path

import pytest

from kinetics.errors import SheetError
from kinetics.sheet import NOT_BUILT, parse_sheet, read_sheet

SMALLEST = """
[reference]
window = [6.20, 6.00]
[[signals]]
species = "acetal"
window = [5.30, 5.50]
protons = 1
[kinetics]
consumed = { acetal = 1 }
laws = ["first-order"]
"""


def mistake(text: str) -> str:
    with pytest.raises(SheetError) as caught:
        parse_sheet(text, "run.toml")
    return str(caught.value)


def test_the_smallest_sheet_and_its_defaults() -> None:
    sheet = parse_sheet(SMALLEST, "run.toml")
    assert sheet.reference.window == (6.0, 6.2)  # either order
    assert sheet.kinetics.confidence == 0.95
    assert sheet.processing.line_broadening_hz == 0.3
    assert sheet.amount_unit == "ratio"
    assert sheet.files.include == ("*",)


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("protons = 1", "protons = 1\nproton = 2", ["signals[1].proton", "did you mean 'protons'"]),
        ("[kinetics]", "[kinetcs]\nx = 1\n[kinetics]", ["kinetcs", "did you mean 'kinetics'"]),
        ("protons = 1", "protons = -1", ["signals[1].protons", "greater than 0", "-1"]),
        ("protons = 1", 'protons = "one"', ["signals[1].protons", "number"]),
        ("window = [5.30, 5.50]", "window = [5.3]", ["signals[1].window"]),
        ("window = [5.30, 5.50]", "window = [5.3, 5.3]", ["signals[1].window", "equal"]),
        ("window = [5.30, 5.50]", "window = [5.3, nan]", ["signals[1].window", "finite"]),
        ("window = [5.30, 5.50]\n", "", ["signals[1].window", "is missing", "[5.30, 5.50]"]),
        ("first-order", "frist-order", ["kinetics.laws[1]", "did you mean 'first-order'"]),
        ("{ acetal = 1 }", "{ ketal = 1 }", ["ketal", "acetal"]),
        ('["first-order"]', '["first-order", "first-order"]', ["a law stands twice"]),
        ('laws = ["first-order"]', "", ["either laws or scheme"]),
        ('laws = ["first-order"]', 'laws = ["second-order-mixed"]', ["exactly two species"]),
        ('laws = ["first-order"]', 'laws = ["consecutive-first-order"]', ["needs intermediate"]),
        ("[reference]\n", '[reference]\nkind = "closure"\n', ["no meaning", "closure"]),
        ("[reference]\n", "[reference]\nconcentration_u = 0.1\n", ["needs concentration"]),
        ("[reference]\n", '[time]\nzone = "Mars/Base"\n[reference]\n', ["time.zone", "Mars/Base"]),
        ("[reference]\n", '[time]\nsource = "interval"\n[reference]\n', ["needs interval_s"]),
        ("[reference]\n", "[reference\n", ["not valid TOML", "line"]),
    ],
)
def test_mistakes(old: str, new: str, said: list[str]) -> None:
    assert old in SMALLEST
    words = mistake(SMALLEST.replace(old, new, 1))
    assert words.startswith("run.toml: ")
    for part in said:
        assert part in words


def test_all_mistakes_at_once() -> None:
    words = mistake(SMALLEST.replace("protons = 1", "protons = 0").replace("first-", "worst-"))
    assert len(words.splitlines()) == 2


@pytest.mark.parametrize(
    ("addition", "key"),
    [
        ("[notify]\nevents = []\n", "notify"),
    ],
)
def test_a_key_without_effect_is_refused_never_ignored(addition: str, key: str) -> None:
    words = mistake(SMALLEST + addition)
    assert f"run.toml: {key}" in words
    assert "not built yet" in words
    assert any(path.startswith(key) for path in NOT_BUILT)


@pytest.mark.parametrize("method", ["sum", "multiplet"])
def test_methods(method: str) -> None:
    sheet = parse_sheet(SMALLEST.replace("protons = 1", f"protons = 1\nmethod = '{method}'"), "x")
    assert sheet.signals[0].method == method


@pytest.mark.parametrize(
    ("make", "said"),
    [
        (lambda _path: None, "there is no such run sheet"),
        (lambda path: path.mkdir(), "is a folder"),
        (lambda path: path.write_bytes(b"\xff\xfe\x00"), "not a text file in UTF-8"),
    ],
)
def test_a_file_that_is_none(tmp_path: Path, make: object, said: str) -> None:
    path = tmp_path / "run.toml"
    make(path)  # type: ignore[operator]
    with pytest.raises(SheetError, match=said):
        read_sheet(path)
