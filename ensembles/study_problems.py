"""Saying what is wrong in a study file, and on which line."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from . import checks

__all__ = ["Problem", "line_of", "problem_of", "refuse", "syntax_line", "unknown_key"]

_HEADER = re.compile(r"^\s*\[\[?\s*([^\[\]]+?)\s*\]\]?\s*(#.*)?$")
_KEY = re.compile(r"""^\s*((?:[\w-]+|"[^"]*"|'[^']*')(?:\s*\.\s*(?:[\w-]+|"[^"]*"|'[^']*'))*)\s*=""")
_WORDS = {
    "float_type": "it should be a number",
    "int_type": "it should be a whole number",
    "int_from_float": "it should be a whole number",
    "string_type": "it should be a text in quotes",
    "tuple_type": 'it should be a list such as ["x", "y"]',
    "too_short": "it should hold at least one entry",
    "finite_number": "it should be a finite number",
    "model_type": "it should be a table, written [name]",
}


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong, and the line of the study file it stands on (None if it stands on none)."""

    line: int | None
    message: str


def _parts(dotted: str) -> tuple[str, ...]:
    return tuple(part.strip().strip("\"'") for part in dotted.split("."))


def line_of(text: str, path: Sequence[str]) -> int | None:
    """The line, from 1, of the key or table header at `path`; None if it is not written in one of these two ways.

    Examples
    --------
    >>> line_of('[prior]\\nkind = "brownian"\\ndiffusion = 0.4', ["prior", "diffusion"])
    3
    """
    wanted = tuple(path)
    table: tuple[str, ...] = ()
    for number, line in enumerate(text.splitlines(), start=1):
        header = _HEADER.match(line)
        if header:
            table = _parts(header[1])
            if table == wanted:
                return number
        key = _KEY.match(line)
        if key and table + _parts(key[1]) == wanted:
            return number
    return None


def syntax_line(message: str) -> int | None:
    """The line that a message of tomllib names."""
    found = re.search(r"at line (\d+)", message)
    return int(found[1]) if found else None


def unknown_key(text: str, path: Sequence[str], tables: Mapping[str, Sequence[str]]) -> Problem:
    """The problem of a key or table that nobody knows, with the nearest known one.

    `tables` lists the known keys of each table.
    """
    *inside, name = path
    if not inside:
        return Problem(line_of(text, path), str(checks.unknown_name("table", name, list(tables))))
    table = inside[0]
    message = str(checks.unknown_name(f"key in [{table}]", name, tables[table]))
    homes = [other for other, keys in tables.items() if name in keys and other != table]
    if homes:
        message = f"key in the wrong table; {name!r} stands in [{table}]; move it under [{homes[0]}]"
    return Problem(line_of(text, path), message)


def _written(path: Sequence[str | int]) -> str:
    """data.position[1] for ("data", "position", 1)."""
    return "".join(f"[{part}]" if isinstance(part, int) else f".{part}" for part in path).lstrip(".")


def problem_of(text: str, error: Mapping[str, Any], tables: Mapping[str, Sequence[str]]) -> Problem:
    """Turn one error of the validation into a problem with its line."""
    location = tuple(error["loc"])
    names = [part for part in location if isinstance(part, str)]
    if error["type"] == "extra_forbidden":
        return unknown_key(text, names, tables)
    if error["type"] == "missing":
        if len(names) == 1:
            keys = ", ".join(tables[names[0]])
            return Problem(None, f"missing table; [{names[0]}] is not in the file; add it, with its keys: {keys}")
        return Problem(
            line_of(text, names[:-1]), f"missing key; [{names[0]}] has no {names[1]!r}; add a line: {names[1]} = ..."
        )
    wish = _WORDS.get(error["type"]) or re.sub(r"^Input should", "it should", str(error["msg"]))
    value = error["input"]
    written = f'"{value}"' if isinstance(value, str) else str(value).lower() if isinstance(value, bool) else repr(value)
    return Problem(line_of(text, names), f"wrong value; {_written(location)} = {written}; {wish}")


def refuse(path: Path, problems: Sequence[Problem]) -> None:
    """Raise one InputError that lists all problems of a study file, in the order of its lines.

    Raises
    ------
    InputError
        If there is a problem at all.
    """
    ordered = sorted(problems, key=lambda problem: (problem.line is None, problem.line or 0))
    places = [f"line {problem.line}: " if problem.line else "" for problem in ordered]
    if len(ordered) == 1:
        separator = ", " if places[0] else ": "
        raise checks.InputError(f"{path}{separator}{places[0]}{ordered[0].message}")
    if ordered:
        listed = "\n".join(f"  {place}{problem.message}" for place, problem in zip(places, ordered))
        raise checks.InputError(f"{path} has {len(ordered)} problems:\n{listed}")
