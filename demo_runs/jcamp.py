"""A simulated FID as JCAMP-DX 5.01 text, written as instruments do.

The layout follows the published standard (Davies and Lampen, Appl. Spectrosc. 47 (1993) 1093;
LONG DATE after Lampen et al., Pure Appl. Chem. 71 (1999) 1549; both from memory): data class
NTUPLES with one page of real and one of imaginary numbers, packed as differences and repeats, or
as plain numbers.
"""

from typing import Literal

import numpy as np
import numpy.typing as npt

from demo_runs.simulate import SimulatedSpectrum

Int64 = npt.NDArray[np.int64]
Encoding = Literal["packed", "plain"]

_LINE = 76
_SQUEEZED = {"+": "@ABCDEFGHI", "-": " abcdefghi"}
_DIFFERENCE = {"+": "%JKLMNOPQR", "-": " jklmnopqr"}
_REPEAT = " STUVWXYZs"


def fid_text(
    spectrum: SimulatedSpectrum, real: Int64, imaginary: Int64, exponent: int, encoding: Encoding
) -> str:
    """Return the whole file.

    Parameters
    ----------
    spectrum
        Where the header comes from.
    real, imaginary
        The integers of the FID, shape (n,); the same that a raw instrument folder holds.
    exponent
        The numbers are these integers times 2 to this power.
    encoding
        ``"packed"``: differences and repeats; ``"plain"``: decimal numbers.
    """
    instrument = spectrum.instrument
    size, dwell = real.size, instrument.dwell_s
    factor = repr(float(2.0**exponent))
    offset_zone = spectrum.start.strftime("%z")
    pages = []
    for symbol, values, page in (("R", real, 1), ("I", imaginary, 2)):
        body = packed(values) if encoding == "packed" else plain(values)
        pages += [f"##PAGE= N={page}", f"##DATA TABLE= (X++({symbol}..{symbol})), XYDATA", *body]
    header = [
        f"##TITLE= {spectrum.title}",
        "##JCAMP-DX= 5.01",
        "##DATA TYPE= NMR FID",
        "##DATA CLASS= NTUPLES",
        f"##ORIGIN= {spectrum.site}",
        f"##OWNER= {spectrum.site}",
        f"##LONG DATE= {spectrum.start:%Y/%m/%d %H:%M:%S} {offset_zone}",
        "$$ LONG DATE is the start of the acquisition; $DATE_START and $DATE are its start and",
        "$$ its end in seconds since 1970-01-01 00:00:00 UTC",
        f"##TEMPERATURE= {spectrum.temperature_k - 273.15:.3f}",
        f"##.OBSERVE FREQUENCY= {instrument.frequency_mhz!r}",
        "##.OBSERVE NUCLEUS= ^1H",
        "##.ACQUISITION MODE= SIMULTANEOUS",
        f"##.AVERAGES= {spectrum.scans}",
        f"##.SOLVENT NAME= {spectrum.solvent}",
        "##.PULSE SEQUENCE= zg",
        *private_labels(spectrum),
        "##NTUPLES= NMR FID",
        "##VAR_NAME= TIME, FID/REAL, FID/IMAG, PAGE NUMBER",
        "##SYMBOL= X, R, I, N",
        "##VAR_TYPE= INDEPENDENT, DEPENDENT, DEPENDENT, PAGE",
        f"##VAR_FORM= AFFN, {'ASDF, ASDF' if encoding == 'packed' else 'AFFN, AFFN'}, AFFN",
        f"##VAR_DIM= {size}, {size}, {size}, 2",
        "##UNITS= SECONDS, ARBITRARY UNITS, ARBITRARY UNITS,",
        f"##FIRST= 0.0, {_scaled(real[0], exponent)}, {_scaled(imaginary[0], exponent)}, 1",
        f"##LAST= {(size - 1) * dwell!r}, {_scaled(real[-1], exponent)}, "
        f"{_scaled(imaginary[-1], exponent)}, 2",
        f"##MIN= 0.0, {_scaled(real.min(), exponent)}, {_scaled(imaginary.min(), exponent)}, 1",
        f"##MAX= {(size - 1) * dwell!r}, {_scaled(real.max(), exponent)}, "
        f"{_scaled(imaginary.max(), exponent)}, 2",
        f"##FACTOR= {dwell!r}, {factor}, {factor}, 1",
    ]
    return "\n".join([*header, *pages, "##END NTUPLES= NMR FID", "##END="]) + "\n"


def private_labels(spectrum: SimulatedSpectrum) -> list[str]:
    """Return the labels that stand alike in JCAMP-DX files and in raw instrument folders."""
    instrument = spectrum.instrument
    delay = spectrum.recycle_s - instrument.acquisition_s
    offset = instrument.carrier_ppm * instrument.frequency_mhz
    carrier_mhz = instrument.frequency_mhz + offset / 1e6
    filtered = instrument.group_delay > 0
    return [
        f"##$AQ_mod= {3 if filtered else 1}",
        f"##$BF1= {instrument.frequency_mhz!r}",
        "##$BYTORDA= 0",
        "##$D= (0..7)",
        " ".join(["0", repr(round(delay, 6)), *["0"] * 6]),
        f"##$DATE= {int(spectrum.end.timestamp())}",
        f"##$DATE_START= {int(spectrum.start.timestamp())}",
        # With GRPDLY given, the two older entries no longer matter; they say "filter" or "none".
        f"##$DECIM= {2000 if filtered else 1}",
        "##$DS= 0",
        f"##$DSPFVS= {20 if filtered else 0}",
        "##$DTYPA= 0",
        f"##$GRPDLY= {instrument.group_delay!r}",
        f"##$NS= {spectrum.scans}",
        "##$NUC1= <1H>",
        f"##$O1= {offset!r}",
        "##$P= (0..7)",
        "0 10.0 20.0 0 0 0 0 0",
        "##$PULPROG= <zg>",
        "##$RG= 32.0",
        f"##$SFO1= {carrier_mhz!r}",
        f"##$SOLVENT= <{spectrum.solvent}>",
        f"##$SW= {instrument.spectral_width_hz / carrier_mhz!r}",
        f"##$SW_h= {instrument.spectral_width_hz!r}",
        f"##$TD= {2 * instrument.points}",
        f"##$TE= {spectrum.temperature_k!r}",
    ]


def _scaled(value: np.int64, exponent: int) -> str:
    return repr(float(value) * 2.0**exponent)


def _pseudo(value: int, digits: dict[str, str]) -> str:
    """A number whose first digit carries sign and kind."""
    text = str(abs(value))
    return digits["-" if value < 0 else "+"][int(text[0])] + text[1:]


def _repeat(count: int) -> str:
    text = str(count)
    return _REPEAT[int(text[0])] + text[1:]


def packed(values: Int64) -> list[str]:
    """Return the lines of one page as differences with repeats.

    Every line starts with the number of its first point and that point in full, which repeats
    the last one of the line before: the check that the standard asks for.
    """
    numbers = values.tolist()
    lines: list[str] = []
    at = 0
    while True:
        begun = at
        line = f"{at} {_pseudo(numbers[at], _SQUEEZED)}"
        last, repeats = "", 1
        while at + 1 < len(numbers) and len(line) + len(last) < _LINE:
            step = _pseudo(numbers[at + 1] - numbers[at], _DIFFERENCE)
            if step == last:
                repeats += 1
            else:
                line += last + (_repeat(repeats) if repeats > 1 else "")
                last, repeats = step, 1
            at += 1
        lines.append(line + last + (_repeat(repeats) if repeats > 1 else ""))
        if at == begun:
            # The check of the last point, or a lone point, after which there is nothing to check.
            return lines


def plain(values: Int64) -> list[str]:
    """Return the lines of one page as decimal numbers, eight a line."""
    numbers = values.tolist()
    return [
        f"{start} " + " ".join(map(str, numbers[start : start + 8]))
        for start in range(0, len(numbers), 8)
    ]
