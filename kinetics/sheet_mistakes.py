"""What is wrong with a run sheet, in words: file, key, expectation and the nearest known key."""

import difflib
from collections.abc import Callable, Sequence
from functools import partial
from typing import Any, get_args

from pydantic import BaseModel, ValidationError

_Known = Callable[[list[int | str]], list[str]]


def mistakes(
    error: ValidationError,
    origin: str,
    data: dict[str, Any],
    root: type[BaseModel],
    also_known: Sequence[str] = (),
) -> list[str]:
    """Return one line for each mistake.

    Parameters
    ----------
    error
        What the check of the data raised.
    origin
        The file named in the lines.
    data
        What was checked.
    root
        The model it was checked with.
    also_known
        Further keys of the top level, named where a key is misspelt.
    """
    items = error.errors(include_url=False)
    # A list is also called too short for entries that are wrong; only the entries are news.
    wrong = [item["loc"] for item in items if item["type"] != "too_short"]
    kept = [
        dict(item)
        for item in items
        if item["type"] != "too_short"
        or not any(loc[: len(item["loc"])] == item["loc"] for loc in wrong)
    ]
    known = partial(_known_keys, root, also_known)
    # A wrong branch of a union is named in brackets by pydantic; the user wrote no such key.
    return [_line(origin, item, data, known) for item in kept]


def _line(origin: str, item: dict[str, Any], data: dict[str, Any], known_keys: _Known) -> str:
    """One mistake as one line: file, key, expectation, and the nearest key where misspelt."""
    keys = _user_keys(item["loc"], data)
    key = _dotted(keys) or "the sheet"
    kind, message = item["type"], str(item["msg"])
    if kind == "extra_forbidden":
        known = known_keys(keys[:-1])
        near = difflib.get_close_matches(str(keys[-1]), known, n=1, cutoff=0.5)
        hint = f"did you mean {near[0]!r}?" if near else f"known here: {', '.join(known)}"
        return f"{origin}: {key}: unknown key; {hint}"
    if kind == "missing":
        return f"{origin}: {key}: is missing; {_EXPECTED.get(str(keys[-1]), 'it is required')}"
    if kind == "value_error":
        return f"{origin}: {key}: {message.removeprefix('Value error, ')}"
    hint = ""
    if kind == "literal_error" and isinstance(item["input"], str):
        expected = str(item.get("ctx", {}).get("expected", ""))
        choices = [part.strip(" '") for part in expected.replace(" or ", ", ").split(",")]
        near = difflib.get_close_matches(item["input"], choices, n=1, cutoff=0.4)
        hint = f"; did you mean {near[0]!r}?" if near else ""
    shown = repr(item["input"])
    shown = shown if len(shown) < 60 else shown[:57] + "…"
    return f"{origin}: {key}: {_sentence(message)}, got {shown}{hint}"


_EXPECTED = {
    "reference": 'expected a table [reference] with a window, or kind = "closure" or "none"',
    "signals": "expected at least one table [[signals]] with species, window and protons",
    "kinetics": "expected a table [kinetics] with consumed or formed, and laws",
    "window": "expected two limits in ppm, e.g. window = [5.30, 5.50]",
    "species": "expected a name, e.g. species = 'acetal'",
    "protons": "expected the number of protons behind the signal, e.g. protons = 1",
}


def _sentence(message: str) -> str:
    message = message.removeprefix("Input should be ")
    return f"expected {message[0].lower()}{message[1:]}" if message else "is wrong"


def _user_keys(loc: tuple[int | str, ...], data: Any) -> list[int | str]:
    """Drop the parts of a location that pydantic adds for unions and constraints."""
    keys: list[int | str] = []
    for position, part in enumerate(loc):
        if isinstance(part, int):
            keys.append(part)
            data = data[part] if isinstance(data, list) and part < len(data) else None
        elif part == "[key]":
            continue
        elif isinstance(data, dict):
            keys.append(part)
            data = data.get(part)
        elif position == len(loc) - 1 and data is None:
            keys.append(part)
    return keys


def _dotted(keys: list[int | str]) -> str:
    text = ""
    for key in keys:
        text += f"[{key + 1}]" if isinstance(key, int) else (f".{key}" if text else key)
    return text


def _known_keys(
    root: type[BaseModel], also_known: Sequence[str], parents: list[int | str]
) -> list[str]:
    """The keys that are known below `parents`."""
    model: Any = root
    for parent in parents:
        if not isinstance(parent, int):
            model = _model_in(model.model_fields[parent].annotation)
    known = [str(name) for name in model.model_fields]
    return [*known, *also_known] if model is root else known


def _model_in(annotation: Any) -> Any:
    """The first pydantic model inside an annotation such as ``tuple[Event, ...]``."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    for part in get_args(annotation):
        found = _model_in(part)
        if found is not None:
            return found
    return None
