"""Readers: one file a format, found by content.

A reader module offers ``completeness(root, source, files) -> str | None`` (what is still missing,
in words) and ``read(root, source) -> tuple[Raw, ...]``. To add a format: write such a module, add
it to `READERS`, teach `sniff` (or `kinetics.spectra.arrival`, for folders) to recognise it, and
inherit its contract in a test
(``tests/spectra/reader_contract.py``).
"""

from __future__ import annotations

import importlib
import re
from pathlib import Path
from typing import TYPE_CHECKING, Protocol, cast

import numpy as np

from kinetics.errors import NotYetError, UnreadableError
from kinetics.spectra.model import Raw

if TYPE_CHECKING:
    from kinetics.spectra.arrival import FileLayer, Source

READERS = {
    "raw folder": "kinetics.spectra.readers.raw_folder",
    "raw series": "kinetics.spectra.readers.series_folder",
    "processed folder": "kinetics.spectra.readers.processed_folder",
    "procpar folder": "kinetics.spectra.readers.procpar_folder",
    "JCAMP-DX": "kinetics.spectra.readers.jcamp",
    "nmrML": "kinetics.spectra.readers.nmrml",
    "text": "kinetics.spectra.readers.text",
}

# Files that lie about in run folders and are no spectra.
_NEVER = re.compile(r"\.(toml|md|json|html?|pdf|png|jpe?g|zip|log|xlsx?|docx?|py|tmp|part)$", re.I)


class _Reader(Protocol):
    def completeness(self, root: Path, source: Source, files: FileLayer) -> str | None: ...

    def read(self, root: Path, source: Source) -> tuple[Raw, ...]: ...


def _reader(kind: str) -> _Reader:
    return cast(_Reader, importlib.import_module(READERS[kind]))


def sniff(name: str, size: int, head: bytes) -> str | None:
    """Return which reader serves a file by its first bytes; None if it is no spectrum.

    Parameters
    ----------
    name
        Its name; only used to leave out what is certainly something else.
    size
        Its size in bytes.
    head
        Its first bytes.
    """
    if _NEVER.search(name):
        return None
    text = head.lstrip(b"\xef\xbb\xbf \t\r\n")
    if text.startswith(b"##") or re.search(rb"^##TITLE\s*=", text, re.M):
        return "JCAMP-DX"
    if b"\x00" in head:
        return None
    if text.startswith(b"<") and re.search(rb"<(?:\w+:)?nmrML[\s>]", text):
        return "nmrML"
    rows = re.findall(
        rb"^[ \t]*[-+]?\d[\d.,]*(?:[eE][-+]?\d+)?[ \t]*[\s,;][ \t]*[-+]?\d[\d.,eE+-]*[ \t;,]*\r?$",
        text,
        re.M,
    )
    if len(rows) >= 3:
        return "text"
    named = re.search(r"\.(txt|csv|tsv|asc|dat|xy)$", name, re.I)
    if named and (size == 0 or text.startswith(b"#") or re.match(rb"[^\n]*ppm", text, re.I)):
        return "text"
    return "JCAMP-DX" if size == 0 and re.search(r"\.(dx|jdx|jcamp)$", name, re.I) else None


def completeness(root: Path, source: Source, files: FileLayer) -> str | None:
    """Return what a source still lacks, in words; None when its own format calls it complete."""
    return _reader(source.kind).completeness(root, source, files)


def read(root: Path, source: Source) -> tuple[Raw, ...]:
    """Read a source.

    Returns
    -------
    One `Raw`, or several where a file holds a series.

    Raises
    ------
    NotYetError
        If it is not complete after all.
    UnreadableError
        If it cannot be read; the message says why in a chemist's words.
    """
    try:
        # Nonsense numbers overflow; what comes of them is checked where they are looked at.
        with np.errstate(all="ignore"):
            return _reader(source.kind).read(root, source)
    except (NotYetError, UnreadableError):
        raise
    except MemoryError:
        raise UnreadableError("the file declares more data than memory can hold") from None
    # The border: file parsers raise anything at all on damaged input (see references).
    except Exception as why:
        raise UnreadableError(f"the file is damaged ({type(why).__name__}: {why})") from why
