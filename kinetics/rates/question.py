"""What is asked of the data."""

from collections.abc import Mapping
from dataclasses import dataclass, field

from kinetics.errors import InputError

# Laws that are the same curve for the data and are told apart by words only.
SAME_CURVE = (frozenset({"first-order", "pseudo-first-order"}),)


@dataclass(frozen=True, slots=True)
class Question:
    """[kinetics] of the run sheet as plain values.

    Attributes
    ----------
    consumed, formed
        Species and stoichiometric coefficient in the reaction as written.
    laws
        Names of the rate laws to be fitted.
    intermediate
        Species between the two steps of consecutive laws.
    scheme
        Mass-action steps instead of laws.
    limiting
        Species to which half-life, conversion and yield refer; None: the first consumed.
    charged
        Amounts put in, mol/L; species not seen in the spectrum may stand here.
    known_start
        Starting amounts, in the unit of the series, that are taken as known and not fitted (a
        product known to be absent). What that costs or gains shows in the interval of k.
    fit_from_s, fit_to_s
        Range of the fit in s since the start; None: open.
    fit_origin_s
        Time the law starts from: SPECIES_0 are the amounts then.
    confidence
        Of all intervals.
    target_conversion
        For the forecast.
    """

    consumed: Mapping[str, float]
    formed: Mapping[str, float] = field(default_factory=dict)
    laws: tuple[str, ...] = ("first-order",)
    intermediate: str | None = None
    scheme: tuple[str, ...] = ()
    limiting: str | None = None
    charged: Mapping[str, float] = field(default_factory=dict)
    fit_from_s: float | None = None
    fit_to_s: float | None = None
    fit_origin_s: float = 0.0
    confidence: float = 0.95
    target_conversion: float | None = None
    known_start: Mapping[str, float] = field(default_factory=dict)

    @property
    def limiting_species(self) -> str | None:
        """The limiting species, None where nothing is consumed."""
        return self.limiting or next(iter(self.consumed), None)


def check_laws(question: Question) -> None:
    """Refuse laws that no data can tell apart.

    Raises
    ------
    InputError
        If two laws are the same curve.
    """
    for group in SAME_CURVE:
        both = [law for law in question.laws if law in group]
        if len(both) > 1:
            raise InputError(
                f"{both[0]} and {both[1]} are the same curve for these data; ask for one of them"
            )
