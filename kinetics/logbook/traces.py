"""`traces.f32`: the spectra before baseline correction, one after the other.

Appended and flushed to the disk before the rows that name them are committed. A torn tail, left
by a crash, lies beyond what the record names and is overwritten; nothing is ever cut, so that a
reader's memory map stays valid.
"""

import os
import zlib
from pathlib import Path
from typing import BinaryIO

import numpy as np

from kinetics.errors import LogbookError
from kinetics.spectra.model import Float32

FILE_NAME = "traces.f32"


class TraceWriter:
    """Appends traces behind the last one the record names."""

    def __init__(self, folder: Path, end: int) -> None:
        """Open the file; `end` is the number of float32 values the record knows of."""
        path = folder / FILE_NAME
        path.touch()
        self._file: BinaryIO = path.open("r+b")
        self._end = end

    def append(self, trace: Float32) -> tuple[int, int, int]:
        """Write a trace and return its offset (in values), size and CRC-32."""
        data = np.ascontiguousarray(trace, "<f4").tobytes()
        self._file.seek(4 * self._end)
        self._file.write(data)
        offset = self._end
        self._end += trace.size
        return offset, int(trace.size), zlib.crc32(data)

    def flush(self) -> None:
        """Force everything written so far onto the disk."""
        self._file.flush()
        os.fsync(self._file.fileno())

    def close(self) -> None:
        """Close the file."""
        self._file.close()


def read_trace(folder: Path, offset: int, size: int) -> Float32:
    """Return one trace, shape (size,), read-only.

    Raises
    ------
    LogbookError
        If the file is shorter than the record says.
    """
    path = folder / FILE_NAME
    try:
        return np.memmap(path, "<f4", "r", offset=4 * offset, shape=(size,))
    except (OSError, ValueError):
        raise LogbookError(f"{path}: the trace at {offset} is missing") from None


def trace_is_intact(folder: Path, offset: int, size: int, crc: int) -> bool:
    """Whether the bytes of a trace are those that were written."""
    try:
        return zlib.crc32(read_trace(folder, offset, size).tobytes()) == crc
    except LogbookError:
        return False
