"""Rate constants of the literature, refitted; and other programs' figures.

Data marked "memory" were recalled, not read from the source; only what a fit reproduces is kept.
"""

import csv
from pathlib import Path

import numpy as np
import pytest

from kinetics.rates.across import Rate, arrhenius
from kinetics.rates.fitting import fit
from kinetics.rates.question import Question
from kinetics.rates.series import make_series

DMS = Path(__file__).resolve().parents[3] / "shared" / "data" / "dms_hydrolysis"


def test_lactone_equilibrium_of_hydroxybutyric_acid() -> None:
    """Long 1951 (memory): accepted k_forward + k_reverse = 9.48e-3 1/min."""
    t = np.array([21, 36, 50, 65, 80, 100, 120, 160, 220.0])
    lactone = np.array([2.41, 3.73, 4.96, 6.10, 7.08, 8.11, 8.90, 10.35, 11.55])
    q = Question({"acid": 1.0}, {"lactone": 1.0}, known_start={"lactone": 0.0, "acid": 18.23})
    f = fit(make_series(t, lactone, ["lactone"]), "first-order-reversible", q, as_stated=True)
    total = f.parameter("k_forward").value + f.parameter("k_reverse").value
    assert total == pytest.approx(9.47e-3, rel=0.01)


def test_alpha_pinene_network() -> None:
    """Fuguitt & Hawkins 1947; Box, Hunter, MacGregor & Erjavec 1973 (memory): S = 19.87."""
    t = np.array([1230, 3060, 4920, 7800, 10680, 15030, 22620, 36420.0])
    y = np.array(
        [
            [88.35, 7.3, 2.3, 0.4, 1.75],
            [76.4, 15.6, 4.5, 0.7, 2.8],
            [65.1, 23.1, 5.3, 1.1, 5.8],
            [50.4, 32.9, 6.0, 1.5, 9.3],
            [37.5, 42.7, 6.0, 1.9, 12.0],
            [25.9, 49.1, 5.9, 2.2, 17.0],
            [14.0, 57.4, 5.1, 2.6, 21.0],
            [4.5, 63.1, 3.8, 2.9, 25.7],
        ]
    )
    names = ["pinene", "dipentene", "ocimene", "pyronene", "dimer"]
    scheme = (
        "pinene -> dipentene",
        "pinene -> ocimene",
        "ocimene -> pyronene",
        "ocimene <-> dimer",
    )
    start = dict.fromkeys(names, 0.0) | {"pinene": 100.0}
    q = Question({"pinene": 1.0}, {"dipentene": 1.0}, scheme=scheme, known_start=start)
    f = fit(make_series(t, y, names), "scheme", q, as_stated=True)
    assert f.estimate.chi2 == pytest.approx(19.8722, abs=5e-5)
    found = [f.parameter(n).value for n in ("k_1", "k_2", "k_3", "k_4", "k_4_reverse")]
    assert found == pytest.approx([5.93e-5, 2.96e-5, 2.05e-5, 27.5e-5, 4.00e-5], rel=3e-3)


def test_biochemical_oxygen_demand() -> None:
    """R 4.2.2 nls on its data set BOD: plateau 19.14257 ± 2.49592, k 0.531091 ± 0.203082."""
    t = np.array([1, 2, 3, 4, 5, 7.0])
    demand = np.array([8.3, 10.3, 19.0, 16.0, 15.6, 19.8])
    q = Question({"A": 1.0}, {"P": 1.0}, known_start={"P": 0.0})
    f = fit(make_series(t, demand, ["P"]), "first-order", q, as_stated=True)
    k, plateau = f.parameters
    assert k.value == pytest.approx(0.531091, abs=6e-7)
    assert k.standard_error == pytest.approx(0.203082, abs=1.5e-5)
    assert plateau.value == pytest.approx(19.14257, abs=6e-6)
    assert plateau.standard_error == pytest.approx(2.49592, abs=1.5e-4)


def test_drug_in_the_blood() -> None:
    """R 4.2.2 nls, Theoph subject 1: 1.777411 and 0.0539546, residual sum 4.28600902.

    The intermediate alone is seen, so the two constants could be the other way round; said.
    """
    t = np.array([0, 0.25, 0.57, 1.12, 2.02, 3.82, 5.1, 7.03, 9.05, 12.12, 24.37])
    c = np.array([0.74, 2.84, 6.57, 10.5, 9.66, 8.58, 8.36, 7.47, 6.89, 5.94, 3.28])
    q = Question({"dose": 1.0}, {"gone": 1.0}, intermediate="blood", known_start={"blood": 0.0})
    f = fit(make_series(t, c, ["blood"]), "consecutive-first-order", q, as_stated=True)
    fast, slow = sorted((f.parameter(n) for n in ("k_1", "k_2")), key=lambda p: -p.value)
    assert f.estimate.chi2 == pytest.approx(4.28600902, rel=1e-7)
    assert fast.value == pytest.approx(1.777411, rel=1e-5)
    assert slow.value == pytest.approx(0.0539546, rel=1e-5)
    assert any(r.code == "constants-swap" for r in f.diagnostics.remarks)


def test_arrhenius_of_dinitrogen_pentoxide() -> None:
    """Daniels & Johnston 1921 (textbook table, memory): Ea = 103 kJ/mol; a fit gives 102.9."""
    t = [273.0, 298.0, 308.0, 318.0, 328.0, 338.0]
    k = [7.87e-7, 3.46e-5, 1.35e-4, 4.98e-4, 1.50e-3, 4.87e-3]
    rates = [Rate(f"{a:g} K", b, 0.01 * b, "1/s", a) for a, b in zip(t, k, strict=True)]
    found = arrhenius(rates)
    assert found.energy_j_mol.value == pytest.approx(102.9e3, abs=60)
    assert found.energy_j_mol.low < 103e3 < found.energy_j_mol.high


def test_profile_limits_agree_with_lmfit() -> None:
    """lmfit 1.3.4 conf_interval at the same probability, to six digits."""
    lmfit = pytest.importorskip("lmfit", reason="lmfit is not installed here")
    t = np.array([1, 2, 3, 4, 5, 7, 9, 12.0])
    rng = np.random.default_rng(1)
    y = 2.0 * np.exp(-0.3 * t) + 0.05 * rng.normal(size=t.size)
    f = fit(make_series(t, y, ["A"]), "first-order", Question({"A": 1.0}), as_stated=True)

    def rest(p: "lmfit.Parameters") -> np.ndarray:
        return np.asarray(p["a"].value * np.exp(-p["k"].value * t) - y)

    start = lmfit.Parameters()
    start.add("a", value=2.0)
    start.add("k", value=0.3)
    mini = lmfit.Minimizer(rest, start)
    best = mini.minimize(method="leastsq", xtol=1e-14, ftol=1e-14)
    limits = lmfit.conf_interval(mini, best, sigmas=[0.95], maxiter=1000)
    for ours, name in ((f.parameter("k"), "k"), (f.parameter("A_0"), "a")):
        assert ours.low == pytest.approx(limits[name][0][1], rel=2e-6)
        assert ours.high == pytest.approx(limits[name][2][1], rel=2e-6)


@pytest.mark.parametrize(
    ("name", "ours", "question", "rates"),
    [
        ("dimerization_irrev", "second-order", Question({"A": 2.0}, {"P": 1.0}), {"k": 0.4}),
        (
            "binary_irrev",
            "second-order-mixed",
            Question({"A": 1.0, "B": 1.0}, {"P": 1.0}),
            {"k": 0.4},
        ),
        (
            "pseudo_irrev",
            "pseudo-first-order",
            Question({"A": 1.0}, {"P": 1.0}),
            {"k_observed": 0.8},
        ),
    ],
)
def test_closed_forms_agree_with_chempy(
    name: str, ours: str, question: Question, rates: dict[str, float]
) -> None:
    """chempy 0.10.2, kinetics/integrated.py."""
    integrated = pytest.importorskip("chempy.kinetics.integrated", reason="chempy is not installed")
    from kinetics.rates.laws import LAWS, mechanism_of

    t = np.linspace(0.1, 4, 9)
    start = {"A": 1.0, "B": 1.6, "P": 0.0}
    found = LAWS[ours].amounts(mechanism_of(LAWS[ours], question), rates, start, t)
    if name == "dimerization_irrev":
        # 2 A -> P, −d[A]/dt = 2 k [A]².
        assert np.allclose(found["A"], integrated.dimerization_irrev(t, 0.4, 1.0), rtol=1e-12)
    elif name == "binary_irrev":
        wanted = integrated.binary_irrev(t, 0.4, 0.0, 1.6, 1.0)
        assert np.allclose(found["P"], wanted, rtol=1e-12)
    else:
        wanted = integrated.pseudo_irrev(t, 0.4, 0.0, 2.0, 1.0)
        assert np.allclose(found["P"], wanted, rtol=1e-12)


@pytest.mark.skipif(not DMS.is_dir(), reason="the open data set is not beside this checkout")
@pytest.mark.parametrize(
    ("run", "k", "error"),
    [("run_52C", 3.630e-3, 1.6e-5), ("run_60C", 8.114e-3, 4.6e-5)],
)
def test_dimethyl_sulfate_integrals(run: str, k: float, error: float) -> None:
    """The authors' integrals give the authors' k to all digits they print (ORIGIN.md).

    ORIGIN.md prints the error at 52 °C as 1.6e-6; their integrals give 1.617e-5, its digits
    with another exponent, by the same fit that agrees at 60 °C.
    """
    with (DMS / f"{run}_integrals.csv").open(encoding="utf-8") as file:
        rows = [(float(r["time_s"]), float(r["reactant_integral"])) for r in csv.DictReader(file)]
    t, y = np.array(rows).T
    f = fit(make_series(t, y, ["DMS"]), "first-order", Question({"DMS": 1.0}), as_stated=True)
    found = f.parameter("k")
    assert found.value == pytest.approx(k, abs=0.5e-6)
    assert found.standard_error == pytest.approx(error, abs=0.05 * error)
