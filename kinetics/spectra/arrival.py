"""Which spectra in a run folder are complete, and which are not yet.

Instruments write to network shares, and notifications of the kernel do not cross them, so the
folder is polled. A spectrum is complete when its own format says so (declared points present, end
mark) *and* its files have not changed between two looks. A folder that waits for its data (a
queued experiment) is normal. What stands between two looks is kept in a `LookMemory`; nothing
is ever written to the run folder.
"""

import hashlib
import os
import re
import stat
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from fnmatch import fnmatchcase
from pathlib import Path
from typing import Protocol

from kinetics.spectra.readers import completeness, sniff
from kinetics.spectra.readers.common import EMPTY_END, MOST_BYTES

# A spectrum found complete is looked into again only when its folder entry changes, and in any
# case at every so many looks: a file rewritten in place does not touch its folder.
FULL_LOOK_EVERY = 30
# Data whose end is still zero are taken as they are after so many looks without change.
EMPTY_END_LOOKS = 60
_DEEPEST = 2


@dataclass(frozen=True, slots=True)
class FileFact:
    """Size (bytes) and modification time (ns) of one raw file; `name` is relative to the root."""

    name: str
    size: int
    mtime_ns: int


@dataclass(frozen=True, slots=True)
class Source:
    """One place a spectrum (or a series of them) is read from.

    Attributes
    ----------
    name
        Path relative to the run folder, with ``/``.
    kind
        Which reader serves: a key of `kinetics.spectra.readers.READERS`.
    files
        The raw files it consists of.
    """

    name: str
    kind: str
    files: tuple[FileFact, ...]

    @property
    def signature(self) -> str:
        """Sizes and times of the files as one string; another signature, another look inside."""
        return ";".join(f"{f.name}:{f.size}:{f.mtime_ns}" for f in self.files)

    def fallback_hash(self, root: Path) -> str:
        """Return the SHA-256 of the files' bytes, or of the signature where those
        cannot be read or are far too many."""
        digest = hashlib.sha256()
        if sum(fact.size for fact in self.files) > MOST_BYTES:
            return hashlib.sha256(self.signature.encode()).hexdigest()
        try:
            for fact in self.files:
                digest.update((root / fact.name).read_bytes())
        except OSError:
            digest.update(self.signature.encode())
        return digest.hexdigest()

    @staticmethod
    def named(root: Path, name: str) -> "Source":
        """Describe the source of a given name (or of one of its rows) as it lies there now.

        Raises
        ------
        OSError
            If it has gone.
        """
        found = _source_at(root, re.sub(r"#\d+$", "", name), OsLayer())
        if found is None:
            raise FileNotFoundError(f"{name} is no longer a spectrum")
        return found


@dataclass(frozen=True, slots=True)
class LookMemory:
    """What one look leaves for the next: signatures seen, what was settled, how often the
    end of the data was found empty, how many looks."""

    seen: Mapping[str, str] = field(default_factory=dict)
    settled: Mapping[str, tuple[int, Source]] = field(default_factory=dict)
    empty_ends: Mapping[str, int] = field(default_factory=dict)
    looks: int = 0


@dataclass(frozen=True, slots=True)
class Look:
    """What one look at a run folder found.

    Attributes
    ----------
    complete
        Sources that may be read, in natural order of their names.
    waiting
        (name, what is missing) of those that are not complete yet.
    trouble
        Why the folder could not be looked at; empty if it could.
    memory
        For the next look.
    """

    complete: tuple[Source, ...]
    waiting: tuple[tuple[str, str], ...]
    trouble: str
    memory: LookMemory


@dataclass(frozen=True, slots=True)
class DirectoryEntry:
    """One entry of a directory listing; times in ns, size in bytes."""

    name: str
    is_dir: bool
    size: int
    mtime_ns: int


class FileLayer(Protocol):
    """What `look` needs of a file system; tests use a simulated network share."""

    def listing(self, path: Path) -> list[DirectoryEntry]:
        """List a directory; OSError where that fails."""

    def head(self, path: Path, size: int) -> bytes:
        """Return the first bytes of a file; OSError where that fails."""

    def tail(self, path: Path, size: int) -> bytes:
        """Return the last bytes of a file; OSError where that fails."""


class OsLayer:
    """The real file system. Only regular files and directories are listed; links are followed."""

    def listing(self, path: Path) -> list[DirectoryEntry]:
        """List a directory; entries that cannot be looked at (dangling links) are left out."""
        out = []
        with os.scandir(path) as entries:
            for entry in entries:
                try:
                    facts = entry.stat()
                except OSError:
                    continue
                if stat.S_ISREG(facts.st_mode) or stat.S_ISDIR(facts.st_mode):
                    is_dir = stat.S_ISDIR(facts.st_mode)
                    out.append(DirectoryEntry(entry.name, is_dir, facts.st_size, facts.st_mtime_ns))
        return out

    def head(self, path: Path, size: int) -> bytes:
        """Return the first bytes of a file."""
        with path.open("rb") as file:
            return file.read(size)

    def tail(self, path: Path, size: int) -> bytes:
        """Return the last bytes of a file."""
        with path.open("rb") as file:
            file.seek(0, os.SEEK_END)
            file.seek(max(file.tell() - size, 0))
            return file.read(size)


def natural_key(name: str) -> tuple[tuple[int, int, str], ...]:
    """Sort key by which ``2`` comes before ``10``."""
    parts = re.split(r"(\d+)", name)
    return tuple((1, int(p), "") if p.isdecimal() else (0, 0, p.lower()) for p in parts if p)


def wanted(name: str, include: Iterable[str], exclude: Iterable[str]) -> bool:
    """Whether a source belongs to the run by the patterns of the sheet.

    A pattern may match the whole relative name or the first part of it (the folder's name).
    """
    names = {name, name.split("/", 1)[0]}
    return any(fnmatchcase(n, p) for n in names for p in include) and not any(
        fnmatchcase(n, p) for n in names for p in exclude
    )


def look(
    folder: Path,
    include: Iterable[str] = ("*",),
    exclude: Iterable[str] = (),
    memory: LookMemory | None = None,
    layer: FileLayer | None = None,
) -> Look:
    """Look into a run folder once.

    Parameters
    ----------
    folder
        The run folder.
    include, exclude
        Patterns by name, as in the sheet.
    memory
        From the look before; None for the first, after which nothing can be complete yet.
    layer
        The file system; None for the real one.
    """
    files = layer or OsLayer()
    before = memory or LookMemory()
    include, exclude = tuple(include), tuple(exclude)
    quick = before.looks % FULL_LOOK_EVERY != 0
    seen: dict[str, str] = {}
    settled: dict[str, tuple[int, Source]] = {}
    empty_ends: dict[str, int] = {}
    complete: list[Source] = []
    waiting: list[tuple[str, str]] = []
    trouble: list[str] = []
    for name, entry in _candidates(folder, files, trouble):
        if not wanted(name, include, exclude):
            continue
        known = before.settled.get(name)
        if quick and known is not None and known[0] == entry.mtime_ns:
            complete.append(known[1])
            settled[name], seen[name] = known, known[1].signature
            continue
        try:
            source = _source_of(folder, name, entry, files)
            missing = None if source is None else completeness(folder, source, files)
        except OSError as why:
            waiting.append((name, f"cannot be read now ({why.strerror or why})"))
            continue
        if source is None:
            continue
        seen[name] = source.signature
        if missing == EMPTY_END and before.seen.get(name) == source.signature:
            empty_ends[name] = before.empty_ends.get(name, 0) + 1
            if empty_ends[name] >= EMPTY_END_LOOKS:
                missing = None  # zeros are all that will come; reading will remark on them
        if missing:
            waiting.append((name, missing))
        elif before.seen.get(name) != source.signature:
            waiting.append((name, "still changing, or seen for the first time"))
        else:
            complete.append(source)
            if source.kind != "raw series":  # grows without touching its folder
                settled[name] = (entry.mtime_ns, source)
    complete.sort(key=lambda s: natural_key(s.name))
    waiting.sort(key=lambda w: natural_key(w[0]))
    if trouble and not complete and not waiting:
        # The share is away: what was known stays known, so that nothing looks new afterwards.
        seen, settled = dict(before.seen), dict(before.settled)
    return Look(
        tuple(complete),
        tuple(waiting),
        "; ".join(trouble),
        LookMemory(seen, settled, empty_ends, before.looks + 1),
    )


def _candidates(
    folder: Path, files: FileLayer, trouble: list[str]
) -> Iterator[tuple[str, DirectoryEntry]]:
    """Yield files and folders that may hold a spectrum, down to experiments in sub-folders."""
    pending = [("", 0)]
    while pending:
        prefix, depth = pending.pop()
        try:
            entries = files.listing(folder / prefix)
        except OSError as why:
            if not prefix:
                trouble.append(f"{folder}: cannot be listed ({why.strerror or why})")
            continue
        names = {entry.name for entry in entries}
        if prefix and RAW_FOLDER_MARKS & names:
            continue  # a raw instrument folder is one candidate; it was yielded by its parent
        for entry in entries:
            if entry.name.startswith("."):
                continue
            name = f"{prefix}{entry.name}"
            yield name, entry
            if entry.is_dir and depth < _DEEPEST:
                pending.append((name + "/", depth + 1))


# One of these in a folder makes it a raw instrument folder.
RAW_FOLDER_MARKS = frozenset({"acqus", "fid", "ser", "procpar", "procs"})


def _source_at(root: Path, name: str, files: FileLayer) -> Source | None:
    parent, _, last = name.rpartition("/")
    for entry in files.listing(root / parent):
        if entry.name == last:
            return _source_of(root, name, entry, files)
    return None


def _source_of(root: Path, name: str, entry: DirectoryEntry, files: FileLayer) -> Source | None:
    """Recognise a candidate by its content; None if it is no spectrum."""
    if entry.is_dir:
        return _folder_source(root, name, files)
    kind = sniff(name, entry.size, files.head(root / name, 4096))
    if kind is None:
        return None
    return Source(name, kind, (FileFact(name, entry.size, entry.mtime_ns),))


def _folder_source(root: Path, name: str, files: FileLayer) -> Source | None:
    """Recognise a raw instrument folder by the files in it; a raw FID comes before its spectrum."""
    entries = files.listing(root / name)
    inside = {e.name: e for e in entries if not e.is_dir}
    folders = {e.name for e in entries if e.is_dir}

    def source(kind: str, *parts: str) -> Source:
        facts = [
            FileFact(f"{name}/{part}", inside[part].size, inside[part].mtime_ns)
            for part in parts
            if part in inside
        ]
        return Source(name, kind, tuple(facts))

    if "procpar" in inside:
        if "fid" not in inside and "datdir" in folders:
            below = {f"datdir/{e.name}": e for e in files.listing(root / name / "datdir")}
            inside.update(below)
        return source("procpar folder", "procpar", "fid" if "fid" in inside else "datdir/phasefile")
    if "ser" in inside:
        return source("raw series", "acqus", "acqu2s", "ser")
    if "fid" in inside:
        return source("raw folder", "acqus", "fid")
    if {"procs", "1r"} <= set(inside):
        return source("processed folder", "acqus", "procs", "1r")
    if "pdata" in folders:
        for number in sorted(
            files.listing(root / name / "pdata"), key=lambda e: natural_key(e.name)
        ):
            if not number.is_dir:
                continue
            prefix = f"pdata/{number.name}"
            below = {
                f"{prefix}/{e.name}": e for e in files.listing(root / name / prefix) if not e.is_dir
            }
            if {f"{prefix}/procs", f"{prefix}/1r"} <= set(below):
                inside.update(below)
                return source("processed folder", "acqus", f"{prefix}/procs", f"{prefix}/1r")
    return source("raw folder", "acqus") if "acqus" in inside else None
