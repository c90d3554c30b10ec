"""Parameter files `acqus`, `acqu2s` and `procs`: labelled entries ``##$NAME= value``.

nmrglue's own parser never returns from a file that is cut inside a string or an array, so this one
is used; the tests compare the two.
"""

import re
from itertools import takewhile
from typing import Any

from kinetics.errors import UnreadableError

_ENTRY = re.compile(r"^##\$(\w+)=[ \t]*(.*?)[ \t\r\n]*(?=^##|^\$\$|\Z)", re.M | re.S)
_ARRAY = re.compile(r"\(0\.\.\d+\)\s*")


def is_whole(text: str) -> bool:
    """Whether the end mark is there."""
    return text.rstrip().endswith("##END=")


def parameter_entries(text: str) -> dict[str, str]:
    """Return name → value as text, without angle brackets; an array is one text."""
    return {key: value.strip().strip("<>").strip() for key, value in _ENTRY.findall(text)}


def parameters(text: str) -> dict[str, Any]:
    """Return name → value: int or float where it is a number, a list for an array, else text."""
    return {key: _value(value) for key, value in parameter_entries(text).items()}


def _value(text: str) -> Any:
    array = _ARRAY.match(text)
    if array:
        return [_value(word) for word in text[array.end() :].split()]
    try:
        return int(text)
    except ValueError:
        pass
    try:
        return float(text)
    except ValueError:
        return text.strip("<>")


def well_formed(text: str) -> None:
    """Refuse text that was opened and never closed, and arrays shorter than declared.

    Raises
    ------
    UnreadableError
        If there is either; the message names the entry.
    """
    lines = text.splitlines()
    for place, line in enumerate(lines):
        key, _, value = line.partition("=")
        value = value.strip()
        if not key.startswith("##"):
            continue
        body = [value, *takewhile(lambda row: not row.startswith(("##", "$$")), lines[place + 1 :])]
        if value.startswith("<") and not any(">" in row for row in body):
            raise UnreadableError(f"the parameter file is damaged at {key[2:40]}: open text")
        array = re.match(r"\(0\.\.(\d+)\)(.*)", value)
        if array is not None:
            items = " ".join([array.group(2), *body[1:]]).split()
            quoted = sum(item.startswith("<") for item in items)
            if max(len(items), quoted) < int(array.group(1)) + 1:
                raise UnreadableError(
                    f"the parameter file is damaged at {key[2:40]}: "
                    f"{len(items)} of {int(array.group(1)) + 1} values"
                )
