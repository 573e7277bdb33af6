"""From a failed validation to one line a user can act on."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

from pydantic import ValidationError

from wakeledger.core.errors import SurveyError, nearest
from wakeledger.run.config.quantities import kind_of

#: Tables that a survey file writes under a heading of their own; what follows in a path is written as a key.
_HEADINGS = frozenset(
    {
        ("reference", "position_error"),
        ("plane", "columns"),
        ("plane", "axes"),
        ("uncertainty", "source"),
    }
)

_NEEDED = {
    "string_type": "text in quotation marks",
    "bool_type": "true or false, without quotation marks",
    "int_type": "a whole number",
    "int_from_float": "a whole number",
    "float_type": "a number",
    "finite_number": "a finite number",
}

_LIMITS = {"greater_than_equal": ("of at least", "ge"), "less_than_equal": ("of at most", "le")}


def place_of(keys: tuple[str | int, ...], raw: Mapping[str, Any]) -> str:
    """A key path as the survey file writes it.

    Parameters
    ----------
    keys : tuple of str and int
        The path, with indices counted from 0.
    raw : mapping
        The file's content, which says whether a table is one of a list.

    Returns
    -------
    str
        Such as ``[plane.columns] u.unit`` or ``[[compare]] 2 (balance) row``.

    Examples
    --------
    >>> place_of(("plane", 0, "columns", "u", "unit"), {"plane": {}})
    '[plane.columns] u.unit'
    """
    heading: tuple[str, ...] = ()
    entry = ""
    value: Any = raw
    rest = list(keys)
    while rest:
        key = rest[0]
        if isinstance(key, int):
            if isinstance(value, list) and key < len(value) and isinstance(value[key], dict):
                value = value[key]
                name = value.get("name")
                entry = f" {key + 1}" + (f" ({name})" if isinstance(name, str) else "")
            elif not isinstance(value, dict):
                break
        else:
            below = value.get(key) if isinstance(value, dict) else None
            if (heading or not _is_table(below)) and ((*heading, key) not in _HEADINGS or entry):
                break
            heading, value = (*heading, key), below
        rest.pop(0)
    name = ".".join(heading)
    place = f"[[{name}]]{entry}" if entry else f"[{name}]" if name else ""
    tail = "".join(f" item {key + 1}" if isinstance(key, int) else f".{key}" for key in rest).removeprefix(".").strip()
    return f"{place} {tail}".strip()


def _is_table(value: object) -> bool:
    """Whether a value of the file stands under a heading of its own."""
    return isinstance(value, dict) or (isinstance(value, list) and bool(value) and isinstance(value[0], dict))


def survey_error(error: ValidationError, raw: Mapping[str, Any], file: object) -> SurveyError:
    """The first problem of a failed validation, in the program's own words.

    Parameters
    ----------
    error : ValidationError
        What the typed tables refused.
    raw : mapping
        The file's content.
    file : path-like
        The survey file.

    Returns
    -------
    SurveyError
    """
    first = error.errors(include_url=False)[0]
    keys: tuple[str | int, ...] = tuple(first["loc"])
    context = first.get("ctx", {})
    kind = first["type"]
    if kind == "survey":
        place = place_of((*keys, *context["keys"]), raw)
        return SurveyError(context["found"], file=file, place=place or None, remedy=context["remedy"] or None)
    given = first.get("input")
    place = place_of(keys, raw)
    if kind == "literal_error":
        allowed = re.findall(r"'([^']*)'", str(context["expected"])) or [str(context["expected"])]
        close = nearest(given, allowed) if isinstance(given, str) else None
        meant = f"did you mean {close!r}? " if close else ""
        remedy = f"{meant}allowed: {', '.join(map(repr, allowed))}"
        return SurveyError(f"{kind_of(given)} is not allowed", file=file, place=place, remedy=remedy)
    if kind in _LIMITS:
        word, limit = _LIMITS[kind]
        remedy = f"write a number {word} {context[limit]}"
        return SurveyError(f"{kind_of(given)} is not allowed", file=file, place=place, remedy=remedy)
    if kind in _NEEDED:
        return SurveyError(f"{kind_of(given)} stands here", file=file, place=place, remedy=f"write {_NEEDED[kind]}")
    return SurveyError(f"{kind_of(given)} is not allowed", file=file, place=place, remedy=str(first["msg"]))
