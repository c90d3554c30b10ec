"""Decisions: who decided what, when and why. Appended and chained by hashes, never changed.

Each decision's hash is taken over its content and the hash of the one before it, so that a
changed or missing decision breaks the chain from there on.
"""

import hashlib
import json
import sqlite3
from dataclasses import dataclass
from datetime import UTC, datetime

from kinetics.errors import InputError
from kinetics.logbook.connection import transaction

# kind: what `subject`, `old` and `new` mean.
KINDS = {
    "set-aside": "subject: source of the spectrum; new: 'out' or 'in'",
    "law": "new: the chosen law, or '' for the automatic choice",
    "sheet": "subject: number of the new version; old, new: hashes of the texts",
    "reviewed": "subject: until when (UTC); new: ''",
}


@dataclass(frozen=True, slots=True)
class Decision:
    """One decision; see `KINDS` for what subject, old and new hold. `at` is UTC."""

    id: int
    at: datetime
    who: str
    kind: str
    subject: str
    old: str
    new: str
    why: str
    previous: str
    hash: str


def chain_hash(
    previous: str, at: str, who: str, kind: str, subject: str, old: str, new: str, why: str
) -> str:
    """Return the hash of a decision."""
    content = json.dumps([previous, at, who, kind, subject, old, new, why], ensure_ascii=False)
    return hashlib.sha256(content.encode()).hexdigest()


def decide(
    connection: sqlite3.Connection,
    *,
    who: str,
    kind: str,
    subject: str = "",
    old: str = "",
    new: str = "",
    why: str = "",
) -> int:
    """Append a decision in a transaction of its own and return its number.

    Raises
    ------
    InputError
        If the name is missing, the kind is unknown, or a spectrum is set aside without a reason.
    """
    with transaction(connection):
        return append(connection, who=who, kind=kind, subject=subject, old=old, new=new, why=why)


def append(
    connection: sqlite3.Connection,
    *,
    who: str,
    kind: str,
    subject: str = "",
    old: str = "",
    new: str = "",
    why: str = "",
) -> int:
    """Append a decision inside a transaction that is already open; otherwise as `decide`."""
    if not who.strip():
        raise InputError("a decision needs the name of whoever decides")
    if kind not in KINDS:
        raise InputError(f"unknown kind of decision {kind!r}; known: {', '.join(KINDS)}")
    if kind == "set-aside" and not why.strip():
        raise InputError("a spectrum is set aside or brought back only with a reason")
    last = connection.execute("SELECT hash FROM decisions ORDER BY id DESC LIMIT 1").fetchone()
    previous = "" if last is None else str(last[0])
    at = datetime.now(UTC).isoformat()
    digest = chain_hash(previous, at, who, kind, subject, old, new, why)
    cursor = connection.execute(
        "INSERT INTO decisions (at, who, kind, subject, old, new, why, previous, hash) "
        "VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?)",
        (at, who, kind, subject, old, new, why, previous, digest),
    )
    return int(cursor.lastrowid or 0)


def all_decisions(connection: sqlite3.Connection) -> tuple[Decision, ...]:
    """Return every decision, oldest first."""
    rows = connection.execute("SELECT * FROM decisions ORDER BY id")
    return tuple(Decision(**{**dict(row), "at": datetime.fromisoformat(row["at"])}) for row in rows)


def broken_links(connection: sqlite3.Connection) -> tuple[int, ...]:
    """Return the numbers of decisions whose hash does not fit their content or predecessor."""
    out, previous = [], ""
    for row in connection.execute("SELECT * FROM decisions ORDER BY id"):
        fits = row["previous"] == previous and row["hash"] == chain_hash(
            row["previous"],
            row["at"],
            row["who"],
            row["kind"],
            row["subject"],
            row["old"],
            row["new"],
            row["why"],
        )
        if not fits:
            out.append(int(row["id"]))
        previous = row["hash"]
    return tuple(out)


def set_aside(decisions: tuple[Decision, ...]) -> dict[str, str]:
    """Return source → reason of the spectra that are set aside now."""
    out: dict[str, str] = {}
    for decision in decisions:
        if decision.kind == "set-aside":
            if decision.new == "out":
                out[decision.subject] = decision.why
            else:
                out.pop(decision.subject, None)
    return out


def chosen_law(decisions: tuple[Decision, ...]) -> str | None:
    """Return the law that was chosen last, None for the automatic choice."""
    laws = [d.new for d in decisions if d.kind == "law"]
    return laws[-1] or None if laws else None
