"""What is fitted: amounts against time with their covariance."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from kinetics.errors import InputError

Float64 = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Series:
    """Amounts of several species along a run. Build it with `make_series` for checks.

    Attributes
    ----------
    time_s
        Middle of each acquisition in s since the start, shape (n,), ascending.
    acquisition_s
        Length of each acquisition in s, 0 where unknown or negligible, shape (n,).
    species
        Names of the columns, length m.
    values
        Shape (n, m), in `unit`.
    covariance
        Random part for each spectrum, shape (n, m, m); off-diagonal where a reference is shared.
    systematic
        Relative standard uncertainty common to all values (that of the reference's concentration):
        it scales amounts and second-order constants, but no first-order constant.
    unit
        ``"mol/L"``, ``"ratio"`` or ``"per scan"``.
    labels
        Name of each spectrum, length n.
    stated
        False where nothing is known of the errors and `covariance` only says how they compare.
    """

    time_s: Float64
    acquisition_s: Float64
    species: tuple[str, ...]
    values: Float64
    covariance: Float64
    systematic: float
    unit: str
    labels: tuple[str, ...]
    stated: bool = True

    @property
    def size(self) -> int:
        """Number of spectra."""
        return int(self.time_s.size)

    def select(self, rows: npt.NDArray[np.bool_] | npt.NDArray[np.intp]) -> "Series":
        """Return the series of some spectra."""
        index = np.arange(self.size)[rows]
        return Series(
            self.time_s[index],
            self.acquisition_s[index],
            self.species,
            self.values[index],
            self.covariance[index],
            self.systematic,
            self.unit,
            tuple(self.labels[i] for i in index),
            self.stated,
        )


def make_series(
    time_s: npt.ArrayLike,
    values: npt.ArrayLike,
    species: Sequence[str],
    *,
    covariance: npt.ArrayLike | None = None,
    standard_uncertainty: npt.ArrayLike | None = None,
    acquisition_s: npt.ArrayLike = 0.0,
    systematic: float = 0.0,
    unit: str = "mol/L",
    labels: Sequence[str] | None = None,
) -> Series:
    """Build a series from plain arrays.

    Parameters
    ----------
    time_s
        Shape (n,).
    values
        Shape (n, m), or (n,) for one species.
    species
        m names.
    covariance, standard_uncertainty
        Shape (n, m, m), or (n, m) for independent errors; a scalar counts for all. Neither: all
        values are equally good, and how good is found from the scatter about the fit.
    acquisition_s, systematic, unit, labels
        As in `Series`.

    Raises
    ------
    InputError
        If shapes do not agree or a value is not finite.

    Examples
    --------
    >>> s = make_series([0, 60, 120], [1.0, 0.8, 0.65], ["ester"], standard_uncertainty=0.01)
    >>> s.values.shape
    (3, 1)
    """
    time = np.atleast_1d(np.asarray(time_s, np.float64))
    data = np.asarray(values, np.float64)
    data = data[:, None] if data.ndim == 1 else data
    count = len(species)
    if data.shape != (time.size, count):
        raise InputError(
            f"values have the shape {data.shape}; {time.size} times and {count} species "
            f"want ({time.size}, {count})"
        )
    if covariance is None:
        u = 1.0 if standard_uncertainty is None else standard_uncertainty
        spread = np.broadcast_to(np.asarray(u, np.float64), data.shape)
        cov = np.einsum("nm,mk->nmk", spread**2, np.eye(count))
    else:
        cov = np.broadcast_to(np.asarray(covariance, np.float64), (time.size, count, count)).copy()
    if not (np.isfinite(time).all() and np.isfinite(data).all() and np.isfinite(cov).all()):
        raise InputError("times, values and covariances must be finite numbers")
    order = np.argsort(time, kind="stable")
    acquisition = np.broadcast_to(np.asarray(acquisition_s, np.float64), time.shape)
    names = [str(i + 1) for i in range(time.size)] if labels is None else list(labels)
    return Series(
        time[order],
        acquisition[order],
        tuple(species),
        data[order],
        cov[order],
        systematic,
        unit,
        tuple(names[i] for i in order),
        covariance is not None or standard_uncertainty is not None,
    )
