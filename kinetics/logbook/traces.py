"""`traces.f32`: the spectra before baseline correction, one after the other.

Appended and flushed to the disk before the rows that name them are committed. A torn tail, left
by a crash, lies beyond what the record names and is overwritten; nothing is ever cut, so that a
reader's memory map stays valid.
"""

import os
import zlib
from pathlib import Path

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
        # Unbuffered: what a full disk refused must not lie in a buffer and fail again later.
        self._file = path.open("r+b", buffering=0)
        self._end = end

    def append(self, trace: Float32) -> tuple[int, int, int]:
        """Write a trace and return its offset (in values), size and CRC-32.

        Raises
        ------
        LogbookError
            If it cannot be written.
        """
        data = np.ascontiguousarray(trace, "<f4").tobytes()
        rest = memoryview(data)
        try:
            self._file.seek(4 * self._end)
            while rest:
                rest = rest[self._file.write(rest) :]
        except OSError as error:
            raise LogbookError(f"the traces cannot be written ({error.strerror})") from None
        offset = self._end
        self._end += trace.size
        return offset, int(trace.size), zlib.crc32(data)

    def flush(self) -> None:
        """Force everything written so far onto the disk.

        Raises
        ------
        LogbookError
            If that fails.
        """
        try:
            os.fsync(self._file.fileno())
        except OSError as error:
            raise LogbookError(f"the traces cannot be written ({error.strerror})") from None

    @property
    def end(self) -> int:
        """Number of float32 values that stand in the file as far as is known here."""
        return self._end

    def back_to(self, end: int) -> None:
        """Forget traces whose rows were never committed; they will be overwritten."""
        self._end = end

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
