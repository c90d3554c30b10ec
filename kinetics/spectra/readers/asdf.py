"""The compressed number forms of JCAMP-DX (AFFN, PAC, SQZ, DIF, DIFDUP), decoded in numpy.

Source: McDonald & Wilks, Appl. Spectrosc. 42 (1988) 151; Davies & Lampen, Appl. Spectrosc. 47
(1993) 1093. A pseudo-digit begins a number and carries sign and kind: ``@A…I a…i`` an ordinate
(SQZ), ``%J…R j…r`` a difference (DIF), ``S…Z s`` a count of repeats (DUP). Where a line ends with a
difference, the next begins with a check value that repeats the last ordinate.
"""

import re

import numpy as np
import numpy.typing as npt

from kinetics.errors import UnreadableError
from kinetics.spectra.model import Float64

_PLAIN, _SQZ, _DIF, _DUP = 0, 1, 2, 3
_MOST_DIGITS = 17
_POWER = 10 ** np.arange(_MOST_DIGITS + 1, dtype=np.int64)


def _tables() -> tuple[bytes, npt.NDArray[np.uint8], npt.NDArray[np.int64], npt.NDArray[np.bool_]]:
    """Of each byte: is it a pseudo-digit, of which kind, which digit, and is it negative?"""
    kinds, digits = np.zeros(256, np.uint8), np.zeros(256, np.int64)
    negative = np.zeros(256, bool)
    digits[48:58] = np.arange(10)
    for kind, first, positive, less in (
        (_SQZ, 0, b"@ABCDEFGHI", b"abcdefghi"),
        (_DIF, 0, b"%JKLMNOPQR", b"jklmnopqr"),
        (_DUP, 1, b"STUVWXYZs", b""),
    ):
        for digit, char in enumerate(positive, first):
            kinds[char], digits[char] = kind, digit
        for digit, char in enumerate(less, 1):
            kinds[char], digits[char], negative[char] = kind, digit, True
    negative[ord("-")] = True
    return bytes(np.flatnonzero(kinds).astype(np.uint8)), kinds, digits, negative


_PSEUDO, _KIND, _DIGIT, _NEGATIVE = _tables()
# What a byte does in a packed line.
_STRANGE, _BETWEEN, _FIGURE, _BEGINS = 0, 1, 2, 3
_PART = np.zeros(256, np.uint8)
_PART[np.frombuffer(b" \t\r\n,;", np.uint8)] = _BETWEEN
_PART[np.frombuffer(b"0123456789.", np.uint8)] = _FIGURE
_PART[np.frombuffer(b"+-" + _PSEUDO, np.uint8)] = _BEGINS
_PSEUDO_SET = re.compile(b"[" + re.escape(_PSEUDO) + b"]")
_EXPONENT = re.compile(rb"(?<=[\d.])[eE](?=[-+]?\d)")
_SIGN = re.compile(rb"(?<![eE\s])([-+])")
_NUMBER = re.compile(rb"[-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?")


def decode(lines: list[bytes], expected: int) -> tuple[Float64, Float64]:
    """Decode the lines of a (X++(Y..Y)) table.

    Parameters
    ----------
    lines
        Lines of the table, each beginning with an abscissa.
    expected
        Declared number of ordinates; decoding stops with an error well beyond it.

    Returns
    -------
    The ordinates, shape (n,), and the abscissa of each line, shape (lines,).

    Raises
    ------
    UnreadableError
        If the table does not follow the rules or holds far more than was declared.
    """
    body = b"\n".join(line for line in lines if line.strip())
    if _is_plain(body):
        return _decode_plain(body)
    return _decode_packed(body, expected)


def _is_plain(body: bytes) -> bool:
    """Whether no pseudo-digits occur (an E may then only be an exponent)."""
    without = _EXPONENT.sub(b"", body) if b"." in body else body
    return _PSEUDO_SET.search(without) is None


def _numbers(body: bytes) -> Float64:
    try:
        values = np.array(body.split(), dtype=np.float64)
    except ValueError:
        raise UnreadableError("the data table holds something that is not a number") from None
    return values


def _decode_plain(body: bytes) -> tuple[Float64, Float64]:
    spaced = _SIGN.sub(rb" \1", body.replace(b",", b" ").replace(b";", b" "))
    counts = np.array([len(line.split()) for line in spaced.split(b"\n")], np.intp)
    values = _numbers(spaced)
    first = np.cumsum(counts) - counts
    keep = np.ones(values.size, bool)
    keep[first] = False
    return values[keep], values[first]


def _decode_packed(body: bytes, expected: int) -> tuple[Float64, Float64]:
    """Decode all lines at once, byte by byte in numpy.

    A token begins with a pseudo-digit, a sign, or a digit after a separator. The first of each
    line is the abscissa; the others are whole numbers by the standard.
    """
    chars = np.frombuffer(body, np.uint8)
    part = _PART[chars]
    if np.any(part == _STRANGE):
        raise UnreadableError("the data table holds something that is not a number")
    belongs = part > _BETWEEN
    before = np.concatenate(([False], belongs[:-1]))
    begins = (part == _BEGINS) | ((part == _FIGURE) & ~before)
    starts = np.flatnonzero(begins)
    if starts.size == 0:
        raise UnreadableError("the data table is damaged")
    # The end of a token: the last byte of it, one before a separator or the next beginning.
    after = np.concatenate((begins[1:] | ~belongs[1:], [True]))
    lengths = np.flatnonzero(belongs & after) - starts + 1
    breaks = np.flatnonzero(chars == ord("\n"))
    line_of = np.searchsorted(breaks, starts)
    is_x = np.concatenate(([True], np.diff(line_of) > 0))
    if np.any(lengths > _MOST_DIGITS):
        raise UnreadableError("the data table holds a number of too many digits")
    power = _descending(lengths)
    inside = np.repeat(starts + lengths - 1, lengths) - power
    figures = chars[inside]
    first = np.cumsum(lengths) - lengths
    values = np.add.reduceat(_DIGIT[figures] * _POWER[power], first)
    less = _NEGATIVE[chars[starts]]
    numbers = np.where(less, -values, values).astype(np.float64)
    decimal = np.searchsorted(first, np.flatnonzero(figures == ord(".")), "right") - 1
    if not np.all(is_x[decimal]):
        raise UnreadableError("a packed ordinate has decimals")
    for token in decimal:  # of abscissas only
        begin = starts[token]
        numbers[token] = _numbers(body[begin : begin + lengths[token]])[0]
    kinds = _KIND[chars[starts]]
    return _undone(numbers[~is_x], kinds[~is_x], line_of[~is_x], expected), numbers[is_x]


def _descending(lengths: npt.NDArray[np.intp]) -> npt.NDArray[np.intp]:
    """For lengths 3, 2: 2, 1, 0, 1, 0."""
    ends = np.cumsum(lengths)
    return np.asarray(np.repeat(ends, lengths) - 1 - np.arange(ends[-1]), np.intp)


def _undone(
    values: Float64, kinds: npt.NDArray[np.uint8], line_of: npt.NDArray[np.intp], expected: int
) -> Float64:
    """Undo DUP, then DIF, then drop the check values."""
    if values.size == 0:
        return values
    is_dup = kinds == _DUP
    if is_dup[0] or np.any(is_dup[1:] & is_dup[:-1]):
        raise UnreadableError("the data table repeats a value that is not there")
    repeats = np.ones(values.size, np.int64)
    dup = np.flatnonzero(is_dup)
    counts = values[dup]
    if np.any(counts < 1) or counts.sum() + values.size > 2 * expected + 4096:
        raise UnreadableError("the data table holds far more values than are declared")
    repeats[dup - 1] = counts.astype(np.int64)
    keep = ~is_dup
    repeats = repeats[keep]
    values = np.repeat(values[keep], repeats)
    kinds = np.repeat(kinds[keep], repeats)
    line_of = np.repeat(line_of[keep], repeats)
    is_dif = kinds == _DIF
    if is_dif[0]:
        raise UnreadableError("the data table begins with a difference")
    running = np.cumsum(np.where(is_dif, values, 0.0))
    absolute = np.maximum.accumulate(np.where(is_dif, 0, np.arange(values.size)))
    ordinates = values[absolute] + running - running[absolute]
    new_line = np.flatnonzero(np.diff(line_of) > 0) + 1
    check = new_line[is_dif[new_line - 1] & ~is_dif[new_line]]
    if np.any(np.abs(ordinates[check] - ordinates[check - 1]) > 0.5):
        raise UnreadableError("a check value of the data table does not fit: the file is damaged")
    return np.delete(ordinates, check)
