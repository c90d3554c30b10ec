"""Numbers and moments as the report writes them."""

from datetime import UTC, datetime

import pytest

from kinetics.report_figures import letter
from kinetics.report_words import clock, plus_minus, pretty, ranges


@pytest.mark.parametrize(
    ("given", "expected"),
    [
        ("k = 2.01e-4 1/s", "k = 2.01 × 10⁻⁴ 1/s"),
        ("-7e-4 to 1.2e6", "−7 × 10⁻⁴ to 1.2 × 10⁶"),
        ("acetal-1, 5e-3x, 0x1e5, v1.2e3", "acetal-1, 5e-3x, 0x1e5, v1.2e3"),
    ],
)
def test_pretty(given: str, expected: str) -> None:
    assert pretty(given).replace("\N{NO-BREAK SPACE}", " ") == expected


@pytest.mark.parametrize(
    ("value", "u", "expected"),
    [
        (390.1019, 5.53, "390.1 ± 5.5"),
        (0.39010, 0.00553, "0.3901 ± 0.0055"),
        (123456.0, 789.0, "123456 ± 789"),
        (float("nan"), 1.0, "—"),
        (1.5, float("nan"), "1.5"),
    ],
)
def test_plus_minus(value: float, u: float, expected: str) -> None:
    assert plus_minus(value, u) == expected


def test_small_words() -> None:
    assert ranges([1, 2, 3, 7, 9, 10]) == "1–3, 7, 9–10"
    assert ranges([]) == ""
    moment = datetime(2026, 3, 3, 19, 0, tzinfo=UTC)
    assert clock(moment, "Europe/Berlin") == "2026-03-03 20:00:00 +01:00"
    assert [letter(i) for i in (0, 25, 26, 53)] == ["A", "Z", "AA", "BB"]
