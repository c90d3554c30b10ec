"""What every rate law must do; each law's tests inherit it."""

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from kinetics.rates.laws import LAWS, mechanism_of
from kinetics.rates.model import make_model
from kinetics.rates.question import Question
from kinetics.rates.series import Float64, make_series


class LawContract:
    """Curve against an integration of the rate equation, and derivatives against differences.

    A subclass says which law, with which question, rates and starting amounts, and writes the
    rate equation anew.
    """

    law: str
    question: Question
    rates: dict[str, float]
    start: dict[str, float]
    times = np.linspace(0.0, 5.0, 21)

    def velocity(self, r: dict[str, float], y: dict[str, float]) -> float:
        """Rate of the reaction as written."""
        raise NotImplementedError

    def change(self, r: dict[str, float], y: dict[str, float]) -> dict[str, float]:
        """Time derivative of each amount."""
        v = self.velocity(r, y)
        out = {s: -a * v for s, a in self.question.consumed.items()}
        for s, p in self.question.formed.items():
            out[s] = out.get(s, 0.0) + p * v
        return out

    def integrated(self, rates: dict[str, float], start: dict[str, float]) -> dict[str, Float64]:
        names = list(start)

        def slope(_t: float, y: Float64) -> list[float]:
            amounts = dict(zip(names, y, strict=True))
            change = self.change(rates, amounts)
            return [change[n] for n in names]

        found = solve_ivp(
            slope,
            (0.0, float(self.times[-1])),
            list(start.values()),
            t_eval=self.times,
            method="DOP853",
            rtol=1e-12,
            atol=1e-14,
        )
        return dict(zip(names, found.y, strict=True))

    def closed(self, rates: dict[str, float], start: dict[str, float]) -> dict[str, Float64]:
        law = LAWS[self.law]
        return law.amounts(mechanism_of(law, self.question), rates, start, self.times)

    def assert_agrees(self, rates: dict[str, float], start: dict[str, float]) -> None:
        wanted, found = self.integrated(rates, start), self.closed(rates, start)
        for name, curve in wanted.items():
            assert np.allclose(found[name], curve, rtol=1e-9, atol=1e-11), name

    def test_curve_is_the_integrated_rate_equation(self) -> None:
        self.assert_agrees(self.rates, self.start)

    def test_nothing_happens_at_vanishing_rates(self) -> None:
        still = {name: (v if name == "order" else 1e-14) for name, v in self.rates.items()}
        for name, curve in self.closed(still, self.start).items():
            assert np.allclose(curve, self.start[name], atol=1e-11)

    def test_matter_is_conserved(self) -> None:
        found = self.closed(self.rates, self.start)
        first = self.question.limiting_species
        assert first is not None
        a = self.question.consumed[first]
        total = found[first] / a
        middle = self.question.intermediate
        if middle is not None:
            total = total + found[middle]
        for name, p in self.question.formed.items():
            if name != middle:
                total = total + found[name] / p
                break
        assert np.allclose(total, total[0], rtol=1e-13)

    def test_derivatives_match_central_differences(self) -> None:
        times = self.times[1:]
        names = tuple(self.start)
        blank = make_series(times, np.ones((times.size, len(names))), names)
        model = make_model(LAWS[self.law], blank, self.question)
        natural = [*self.rates.values(), *(self.start[s] for s in model.free_start)]
        x = model.to_vector(np.array(natural))
        none = np.zeros_like(times)
        exact = model.jacobian(x, times, none)
        for i in range(x.size):
            h = 1e-6 * max(abs(x[i]), 1.0)
            up, down = np.array(x), np.array(x)
            up[i] += h
            down[i] -= h
            rough = (model.predict(up, times, none) - model.predict(down, times, none)) / (2 * h)
            assert np.allclose(exact[:, :, i], np.real(rough), rtol=1e-6, atol=1e-8), i

    def test_vector_and_natural_parameters_are_inverse(self) -> None:
        names = tuple(self.start)
        blank = make_series(self.times, np.full((self.times.size, len(names)), 0.7), names)
        model = make_model(LAWS[self.law], blank, self.question)
        natural = np.array([*self.rates.values(), *(self.start[s] for s in model.free_start)])
        assert model.to_natural(model.to_vector(natural)) == pytest.approx(natural, rel=1e-14)

    def test_long_acquisitions_are_averaged_not_sampled(self) -> None:
        names = tuple(self.start)
        times = np.linspace(0.5, 4.5, 9)
        length = np.full(times.size, 0.8)
        blank = make_series(times, np.ones((times.size, len(names))), names)
        model = make_model(LAWS[self.law], blank, self.question)
        x = model.to_vector(
            np.array([*self.rates.values(), *(self.start[s] for s in model.free_start)])
        )
        fine = (np.arange(2000) + 0.5) / 2000 - 0.5
        for row, (t, width) in enumerate(zip(times, length, strict=True)):
            sampled = model.predict(x, t + fine * width, np.zeros(fine.size)).mean(axis=0)
            found = model.predict(x, times, length)[row]
            assert np.allclose(found, sampled, rtol=2e-4, atol=1e-6)
