"""Follow a reaction by proton NMR, from a folder of spectra to a rate constant.

For notebooks: a series from a table, or from a logbook, then a fit.

>>> from kinetics import Question, fit, make_series
>>> series = make_series(
...     [0, 600, 1200, 1800, 2400, 3000],
...     [0.400, 0.327, 0.268, 0.219, 0.180, 0.147],
...     ["ester"],
...     standard_uncertainty=0.001,
... )
>>> found = fit(series, "first-order", Question({"ester": 1}))
>>> k = found.parameter("k")
>>> f"{k.value:.3g} {k.unit} ({k.low:.3g} to {k.high:.3g})"
'0.000333 1/s (0.000332 to 0.000335)'

``study`` fits several laws and says which the data single out; ``load_run`` opens a logbook, whose
``series()`` and ``question()`` go into the same functions; ``study_run`` does both at once.

Names are loaded when they are first used, so that the commands start quickly.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

from kinetics.version import __version__

if TYPE_CHECKING:
    from kinetics.rates.across import Rate, arrhenius, eyring, ratio, replicates
    from kinetics.rates.fitting import Fit, fit
    from kinetics.rates.question import Question
    from kinetics.rates.series import Series, make_series
    from kinetics.rates.study import Study, study
    from kinetics.run import Run, load_run, study_run
    from kinetics.sheet import Sheet, read_sheet

_WHERE = {
    "Fit": "rates.fitting",
    "Question": "rates.question",
    "Rate": "rates.across",
    "Run": "run",
    "Series": "rates.series",
    "Sheet": "sheet",
    "Study": "rates.study",
    "arrhenius": "rates.across",
    "eyring": "rates.across",
    "fit": "rates.fitting",
    "load_run": "run",
    "make_series": "rates.series",
    "ratio": "rates.across",
    "read_sheet": "sheet",
    "replicates": "rates.across",
    "study": "rates.study",
    "study_run": "run",
}

__all__ = [
    "Fit",
    "Question",
    "Rate",
    "Run",
    "Series",
    "Sheet",
    "Study",
    "__version__",
    "arrhenius",
    "eyring",
    "fit",
    "load_run",
    "make_series",
    "ratio",
    "read_sheet",
    "replicates",
    "study",
    "study_run",
]


def __getattr__(name: str) -> Any:
    if name in _WHERE:
        return getattr(import_module(f"kinetics.{_WHERE[name]}"), name)
    raise AttributeError(f"module 'kinetics' has no attribute {name!r}")
