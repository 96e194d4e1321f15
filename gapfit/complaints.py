"""Plain words for what is wrong with a study: key, what was found, what is allowed."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from difflib import get_close_matches
from typing import Any

__all__ = ["Problem", "explain", "key_lines"]

Detail = Mapping[str, Any]
_UNKNOWN = ("extra_forbidden", "unexpected_keyword_argument")
_NEEDED = {
    "float": "a number",
    "int": "a whole number",
    "string": "a text in quotes",
    "bool": "true or false",
    "tuple": "a list in brackets",
    "list": "a list in brackets",
    "model": "a section with keys of its own",
    "dataclass": 'a column, written { column = "name" }',
    "union": 'a column { column = "name" }, a number, { from_name = "..." } or { table = "..." }',
}
_BOUNDS = {
    "greater_than": ("gt", "above"),
    "greater_than_equal": ("ge", "at least"),
    "less_than": ("lt", "below"),
    "less_than_equal": ("le", "at most"),
}


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong.

    Attributes
    ----------
    key : str
        Dotted key, empty for the file as a whole.
    message : str
    """

    key: str
    message: str


def explain(
    details: Sequence[Detail], allowed: Callable[[tuple[str, ...]], tuple[str, ...]]
) -> list[Problem]:
    """Problems of a failed validation, each once.

    Parameters
    ----------
    details : sequence of mapping
        As pydantic tells them: ``type``, ``loc``, ``input``, ``msg``, ``ctx``. Parts of ``loc`` that begin
        with ``@`` are tags of unions.
    allowed : callable
        Keys that are allowed in a table, given its place.

    Returns
    -------
    list of Problem
    """
    unknown = {d["loc"][:-1] for d in details if d["type"] in _UNKNOWN}
    problems: dict[tuple[str, str], Problem] = {}
    for detail in details:
        place = tuple(str(part) for part in detail["loc"])
        names = tuple(part for part in place if not part.startswith("@"))
        key = ".".join(names)
        if detail["type"] == "missing" and detail["loc"][:-1] in unknown and _is_misspelt(detail, details):
            continue  # the wrong spelling is reported
        problems.setdefault((key, detail["type"]), Problem(key, _words(detail, place, allowed)))
    return list(problems.values())


def _is_misspelt(missing: Detail, details: Sequence[Detail]) -> bool:
    """Whether an unknown key beside a missing one is close to it."""
    name, table = str(missing["loc"][-1]), missing["loc"][:-1]
    others = [str(d["loc"][-1]) for d in details if d["type"] in _UNKNOWN and d["loc"][:-1] == table]
    return bool(get_close_matches(name.lower(), [other.lower() for other in others], cutoff=0.6))


def _words(
    detail: Detail, place: tuple[str, ...], allowed: Callable[[tuple[str, ...]], tuple[str, ...]]
) -> str:
    kind, context = detail["type"], detail.get("ctx", {})
    if kind in _UNKNOWN:
        return _unknown_key(place[-1], allowed(place[:-1]))
    if kind == "missing":
        return "this key is missing and has no default"
    if kind == "value_error":
        return str(context.get("error", detail["msg"]))
    found = f"found {detail['input']!r}"
    if kind == "literal_error":
        return f"{found}; allowed are {context.get('expected', '')}"
    if kind in _BOUNDS:
        name, words = _BOUNDS[kind]
        return f"{found}; it must be {words} {context[name]:g}"
    if kind == "finite_number":
        return f"{found}; a finite number is needed"
    if kind == "string_too_short":
        return "found an empty text; write something between the quotes"
    return f"{found}; {_NEEDED.get(kind.split('_')[0], 'another kind of value')} is needed"


def _unknown_key(name: str, keys: tuple[str, ...]) -> str:
    lowered = {key.lower(): key for key in keys}
    near = [lowered[k] for k in get_close_matches(name.lower(), list(lowered), n=2, cutoff=0.5)]
    hint = f"did you mean {' or '.join(map(repr, near))}? " if near else ""
    return f"unknown key; {hint}allowed here are {', '.join(keys)}"


_HEADER = re.compile(r"\s*\[\[?\s*([^\[\]]+?)\s*\]\]?\s*(?:#.*)?$")
_KEY = re.compile(r"\s*((?:[\w\-]+|\"[^\"]*\"|'[^']*')(?:\s*\.\s*(?:[\w\-]+|\"[^\"]*\"|'[^']*'))*)\s*=")


def key_lines(text: str) -> dict[str, int]:
    """Line of every section and key of a TOML text that stands at the start of a line.

    Parameters
    ----------
    text : str
        A valid TOML text.

    Returns
    -------
    dict of str to int
        Dotted key to line, counted from 1.
    """
    lines: dict[str, int] = {}
    section = ""
    for number, line in enumerate(text.splitlines(), start=1):
        header = _HEADER.match(line)
        key = _KEY.match(line)
        if header is not None:
            section = _plain_key(header[1])
            lines.setdefault(section, number)
        elif key is not None:
            name = _plain_key(key[1])
            lines.setdefault(f"{section}.{name}" if section else name, number)
    return lines


def _plain_key(text: str) -> str:
    return ".".join(part.strip().strip("\"'") for part in text.split("."))
