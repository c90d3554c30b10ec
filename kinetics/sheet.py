"""The run sheet: one TOML file that says what to follow, checked before anything is measured.

`read_sheet` turns the file into a frozen `Sheet`. Every mistake is reported at once as a
`SheetError` whose lines name the file, the key, what was expected and, for a misspelt key, the
nearest known one. A key whose effect is not built yet is refused, never ignored.
"""

import hashlib
import tomllib
from datetime import datetime
from pathlib import Path
from typing import Annotated, Any, Literal, Self, get_args
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from pydantic import (
    AfterValidator,
    BaseModel,
    ConfigDict,
    Field,
    StringConstraints,
    ValidationError,
    model_validator,
)

from kinetics.errors import SheetError
from kinetics.sheet_mistakes import mistakes

LawName = Literal[
    "zero-order",
    "first-order",
    "first-order-reversible",
    "pseudo-first-order",
    "second-order",
    "second-order-mixed",
    "nth-order",
    "consecutive-first-order",
    "autocatalytic",
]
LAWS: tuple[str, ...] = get_args(LawName)

# Keys of the contract whose effect is not built yet, by path, and what it will be. A path through
# [[signals]] means any of them; "path=value" only that value. Emptied as they are built.
NOT_BUILT: dict[str, str] = {
    "notify": "telling someone about events",
}


def _ascending(pair: tuple[float, float]) -> tuple[float, float]:
    low, high = sorted(pair)
    if not high > low:
        raise ValueError("the two limits are equal; give a range with some width")
    return low, high


def _zone(name: str) -> str:
    try:
        ZoneInfo(name)
    except (ZoneInfoNotFoundError, ValueError, OSError):
        raise ValueError(
            f"no time zone is called {name!r}; expected e.g. 'Europe/Berlin'"
        ) from None
    return name


Window = Annotated[tuple[float, float], AfterValidator(_ascending)]
Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
NotNegative = Annotated[float, Field(ge=0, allow_inf_nan=False)]
Name = Annotated[str, StringConstraints(strip_whitespace=True, min_length=1, max_length=200)]
Coefficients = dict[Name, Positive]


class _Table(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False)


class Files(_Table):
    """Which files of the run folder belong to the run."""

    also: tuple[str, ...] = ()
    include: tuple[str, ...] = ("*",)
    exclude: tuple[str, ...] = ()


class Time(_Table):
    """How the time of a spectrum is found."""

    zone: Annotated[str, AfterValidator(_zone)] | None = None
    source: Literal["recorded", "file", "interval"] = "recorded"
    interval_s: Positive | None = None
    acquisition_s: Positive | None = None
    lag_s: NotNegative = 0.0

    @model_validator(mode="after")
    def _interval_needs_its_length(self) -> Self:
        if self.source == "interval" and self.interval_s is None:
            raise ValueError('source = "interval" needs interval_s, from start to start in s')
        return self


class Processing(_Table):
    """How a FID becomes a spectrum."""

    line_broadening_hz: NotNegative = 0.3
    zero_fill: Literal[1, 2, 4, 8] = 2
    phase: Literal["automatic", "recorded"] | tuple[float, float] = "automatic"
    baseline: Literal["automatic", "none"] = "automatic"
    exclude: tuple[Window, ...] = ()


class ShiftReference(_Table):
    """The line the shift axis hangs on."""

    window: Window
    shift: float


class Reference(_Table):
    """What every signal is divided by."""

    kind: Literal["signal", "closure", "none"] = "signal"
    name: Name | None = None
    window: Window | None = None
    protons: Positive = 1.0
    shift: float | None = None
    concentration: Positive | None = None
    concentration_u: NotNegative | None = None
    t1_s: Positive | None = None

    @model_validator(mode="after")
    def _window_belongs_to_a_signal(self) -> Self:
        if self.kind == "signal" and self.window is None:
            raise ValueError('kind = "signal" needs window, the two limits in ppm')
        if self.kind != "signal":
            for key in ("window", "shift", "concentration", "concentration_u", "t1_s"):
                if getattr(self, key) is not None:
                    raise ValueError(f'{key} has no meaning with kind = "{self.kind}"')
        if self.concentration_u is not None and self.concentration is None:
            raise ValueError("concentration_u needs concentration")
        return self


class Coupling(_Table):
    """Splitting by `n` equivalent neighbours with the coupling constant `hz`."""

    n: Annotated[int, Field(ge=1, le=12)]
    hz: Positive


class SignalEntry(_Table):
    """One signal of one species."""

    species: Name
    window: Window
    protons: Positive
    couplings: tuple[Coupling, ...] = ()
    method: Literal["sum", "multiplet"] = "sum"
    follow: bool = True
    exchanging: bool = False
    t1_s: Positive | None = None


class Event(_Table):
    """Something that was done to the reaction."""

    kind: Literal["start", "dose", "feed", "sample", "quench", "note"]
    at: datetime
    volume_ml: NotNegative | None = None
    text: str = ""


class Vessel(_Table):
    """The vessel."""

    volume_ml: Positive


class TemperatureLog(_Table):
    """A file of temperatures (columns time, celsius) joined to the spectra."""

    log: str
    place: Literal["probe", "vessel"] = "vessel"


class Kinetics(_Table):
    """What is asked of the data."""

    consumed: Coefficients = Field(default_factory=dict)
    formed: Coefficients = Field(default_factory=dict)
    intermediate: Name | None = None
    scheme: tuple[str, ...] = ()
    limiting: Name | None = None
    charged: dict[Name, NotNegative] = Field(default_factory=dict)
    laws: tuple[LawName, ...] = ()
    fit_from_s: float | None = None
    fit_to_s: float | None = None
    confidence: Annotated[float, Field(gt=0.5, lt=1)] = 0.95
    target_conversion: Annotated[float, Field(gt=0, lt=1)] | None = None

    @model_validator(mode="after")
    def _complete(self) -> Self:
        if not self.consumed and not self.formed:
            raise ValueError("name at least one species in consumed or formed, e.g. { acetal = 1 }")
        if bool(self.scheme) == bool(self.laws):
            raise ValueError("give either laws or scheme, e.g. laws = ['first-order']")
        if len(set(self.laws)) < len(self.laws):
            raise ValueError("a law stands twice in laws")
        both = set(self.consumed) & set(self.formed)
        if both:
            raise ValueError(f"{sorted(both)[0]!r} stands in both consumed and formed")
        if self.limiting is not None and self.limiting not in self.consumed:
            raise ValueError(f"limiting = {self.limiting!r} is not one of consumed")
        if "second-order-mixed" in self.laws and len(self.consumed) != 2:
            raise ValueError("second-order-mixed needs exactly two species in consumed")
        if "consecutive-first-order" in self.laws and self.intermediate is None:
            raise ValueError("consecutive-first-order needs intermediate, the species in between")
        if (
            self.fit_from_s is not None
            and self.fit_to_s is not None
            and self.fit_to_s <= self.fit_from_s
        ):
            raise ValueError("fit_to_s must be later than fit_from_s")
        return self


class Display(_Table):
    """How it is shown; changes no number."""

    time: Literal["s", "min", "h"] | None = None
    amount: Literal["M", "mM", "percent"] | None = None


class Sheet(_Table):
    """The whole run sheet. Units are in the key names; windows are ascending pairs in ppm."""

    title: str = ""
    experiment: str | None = None
    solvent: str | None = None
    started: datetime | None = None
    temperature_c: Annotated[float, Field(gt=-273.15, lt=1000)] | None = None
    temperature_u_c: NotNegative | None = None
    temperature: TemperatureLog | None = None
    files: Files = Files()
    time: Time = Time()
    processing: Processing = Processing()
    shift_reference: ShiftReference | None = None
    reference: Reference
    signals: Annotated[tuple[SignalEntry, ...], Field(min_length=1)]
    events: tuple[Event, ...] = ()
    vessel: Vessel | None = None
    kinetics: Kinetics
    display: Display = Display()

    @model_validator(mode="after")
    def _parts_agree(self) -> Self:
        observed = {signal.species for signal in self.signals}
        asked = set(self.kinetics.consumed) | set(self.kinetics.formed)
        if not observed & asked:
            raise ValueError(
                f"kinetics asks for {', '.join(sorted(asked))}, but the signals are of "
                f"{', '.join(sorted(observed))}; at least one species must be in both"
            )
        if self.reference.kind == "closure" and not any(
            value > 0 for name, value in self.kinetics.charged.items() if name in asked
        ):
            raise ValueError('reference kind = "closure" needs kinetics.charged, in mol/L')
        if any(event.volume_ml is not None for event in self.events) and self.vessel is None:
            raise ValueError("an event with volume_ml needs [vessel] volume_ml")
        if self.temperature is not None and self.temperature_c is not None:
            raise ValueError("give either temperature_c or a [temperature] table")
        return self

    @property
    def species(self) -> tuple[str, ...]:
        """The observed species, in the order of the signals."""
        return tuple(dict.fromkeys(signal.species for signal in self.signals))

    @property
    def amount_unit(self) -> str:
        """``"mol/L"``, ``"ratio"`` or ``"per scan"``."""
        if self.reference.kind == "none":
            return "per scan"
        if self.reference.kind == "signal" and self.reference.concentration is None:
            return "ratio"
        return "mol/L"


def fingerprint(text: str) -> str:
    """Return the SHA-256 of a sheet's text; two sheets with the same one are the same version."""
    return hashlib.sha256(text.encode()).hexdigest()


def read_sheet(path: Path) -> tuple[Sheet, str]:
    """Read and check a run sheet.

    Returns
    -------
    The sheet and its text as it stands in the file.

    Raises
    ------
    SheetError
        If the file cannot be read or anything in it is wrong. All mistakes are named at once.
    """
    try:
        text = path.read_text(encoding="utf-8")
    except FileNotFoundError:
        raise SheetError(f"{path}: there is no such run sheet") from None
    except IsADirectoryError:
        raise SheetError(f"{path}: is a folder; expected a run sheet (TOML file)") from None
    except UnicodeDecodeError:
        raise SheetError(f"{path}: is not a text file in UTF-8; expected a run sheet") from None
    except OSError as error:
        raise SheetError(f"{path}: cannot be read ({error.strerror})") from None
    return parse_sheet(text, str(path)), text


def parse_sheet(text: str, origin: str) -> Sheet:
    """Check the text of a run sheet; `origin` is the file named in the errors.

    Raises
    ------
    SheetError
        If anything is wrong.
    """
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise SheetError(f"{origin}: is not valid TOML: {error}") from None
    for path, effect in NOT_BUILT.items():
        key, _, value = path.partition("=")
        if _holds(data, key.split("."), value):
            named = f'{key} = "{value}"' if value else key
            raise SheetError(
                f"{origin}: {named}: {effect} is not built yet in this version; "
                "take the key out to go on without it"
            )
    try:
        return Sheet.model_validate(data)
    except ValidationError as error:
        lines = mistakes(error, origin, data, Sheet, also_known=("notify",))
        raise SheetError("\n".join(dict.fromkeys(lines))) from None


def _holds(data: Any, keys: list[str], value: str = "") -> bool:
    """Whether a key stands there (with that value, where one is asked for)."""
    if not keys:
        return not value or data == value
    if isinstance(data, list):
        return any(_holds(part, keys, value) for part in data)
    return isinstance(data, dict) and keys[0] in data and _holds(data[keys[0]], keys[1:], value)
