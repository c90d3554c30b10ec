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


def _tables() -> tuple[bytes, npt.NDArray[np.uint8], dict[bytes, bytes]]:
    kinds = np.zeros(256, np.uint8)
    expand: dict[bytes, bytes] = {}
    for digit, char in enumerate(b"@ABCDEFGHI"):
        kinds[char] = _SQZ
        expand[bytes([char])] = b" %d" % digit
    for digit, char in enumerate(b"abcdefghi", 1):
        kinds[char] = _SQZ
        expand[bytes([char])] = b" -%d" % digit
    for digit, char in enumerate(b"%JKLMNOPQR"):
        kinds[char] = _DIF
        expand[bytes([char])] = b" %d" % digit
    for digit, char in enumerate(b"jklmnopqr", 1):
        kinds[char] = _DIF
        expand[bytes([char])] = b" -%d" % digit
    for digit, char in enumerate(b"STUVWXYZs", 1):
        kinds[char] = _DUP
        expand[bytes([char])] = b" %d" % digit
    return bytes(sorted(b"".join(expand))), kinds, expand


_PSEUDO, _KIND, _EXPAND = _tables()
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
    # Token kinds in order: pseudo-digits say theirs; a number that begins with a plain digit or
    # sign after a separator is the abscissa of a line, or a plain ordinate (PAC).
    spaced = _SIGN.sub(rb" \1", body)
    marked = _PSEUDO_SET.sub(lambda m: b" " + m.group(), spaced)
    counts = np.array([len(line.split()) for line in marked.split(b"\n")], np.intp)
    tokens = marked.split()
    kinds = _KIND[np.frombuffer(b"".join(t[:1] for t in tokens), np.uint8)]
    values = _numbers(_PSEUDO_SET.sub(lambda m: _EXPAND[m.group()], marked))
    if values.size != kinds.size:
        raise UnreadableError("the data table is damaged")
    first = np.cumsum(counts) - counts
    is_x = np.zeros(values.size, bool)
    is_x[first] = True
    line_of = np.repeat(np.arange(counts.size), counts)[~is_x]
    return _undone(values[~is_x], kinds[~is_x], line_of, expected), values[is_x]


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
