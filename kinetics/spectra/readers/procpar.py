"""The text of a `procpar` parameter file.

Each parameter is a line of eleven fields (name, …, basic type at the third), a line that begins
with the number of values (numbers stand on it, strings on it and on the lines that follow, in
double quotes), and a line of permitted values. nmrglue's own parser never returns from a file
that is cut inside a string or an array, so this one is used; the tests compare the two.
"""

import re

from kinetics.errors import NotYetError, UnreadableError

_HEAD = re.compile(r"^[A-Za-z_$]\w*( -?[\d.eE+-]+){10}\s*$")
_MOST_VALUES = 1 << 20


def parse(text: str) -> dict[str, tuple[str, ...]]:
    """Return name → values, all as text.

    Raises
    ------
    NotYetError
        If the text ends inside a parameter.
    UnreadableError
        If it is no parameter file.
    """
    lines = text.split("\n")
    if lines and lines[-1] == "":
        lines.pop()
    elif lines:
        raise NotYetError("the parameter file procpar is not written to its end")
    out: dict[str, tuple[str, ...]] = {}
    at = 0
    while at < len(lines):
        if not _HEAD.match(lines[at]):
            raise UnreadableError(f"the parameter file procpar is damaged at line {at + 1}")
        fields = lines[at].split()
        values, at = _values(lines, at + 1, fields[2] == "2")
        _, at = _values(lines, at, fields[2] == "2")
        out[fields[0]] = values
    return out


def _values(lines: list[str], at: int, strings: bool) -> tuple[tuple[str, ...], int]:
    """Values that begin at a line, and the line after them."""
    if at >= len(lines):
        raise NotYetError("the parameter file procpar is not written to its end")
    first, _, rest = lines[at].partition(" ")
    if not first.isdigit() or int(first) > _MOST_VALUES:
        raise UnreadableError(f"the parameter file procpar is damaged at line {at + 1}")
    count = int(first)
    if not strings or count == 0:
        values = rest.split()
        if len(values) != count:
            raise UnreadableError(f"the parameter file procpar is damaged at line {at + 1}")
        return tuple(v.strip('"') for v in values), at + 1
    found = [t.strip() for t in re.findall(r'"[^"]*"', rest)]
    if len(found) == count:  # permitted strings stand on one line
        return tuple(v[1:-1] for v in found), at + 1
    if count > len(lines) - at:
        raise NotYetError("the parameter file procpar is not written to its end")
    texts = [rest, *lines[at + 1 : at + count]]
    if any(len(t.strip()) < 2 or t.strip()[0] != '"' or t.strip()[-1] != '"' for t in texts):
        raise UnreadableError(f"the parameter file procpar is damaged at line {at + 1}")
    return tuple(t.strip()[1:-1] for t in texts), at + count
