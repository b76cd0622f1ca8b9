"""A job file as text that is edited in place: what a person wrote around a changed value, comments too, stays.

Every edit is checked: the text must then mean exactly what the tree with the same edit means. Where it does not (dotted
keys, tables written inline), the text is written anew from the tree and its comments are lost; `rewritten` says so.
"""

from __future__ import annotations

import copy
import re
import tomllib
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

from murmesh.plugin.job import Job
from murmesh.plugin.job_text import job_of, toml_key, toml_tree, toml_value
from murmesh.solver.errors import FormatError

Path_ = tuple[str | int, ...]
REMOVED = object()
"""The value that takes a key away."""
_HEAD = re.compile(r"\s*\[.*\]\s*(#.*)?$")


@dataclass(frozen=True)
class Document:
    """The text of a job file and the folder that the files it names are in."""

    text: str
    folder: Path = Path()
    rewritten: bool = False

    @cached_property
    def tree(self) -> dict[str, Any]:
        """The tables and values as they are written. Raises FormatError for text that is not TOML."""
        try:
            return tomllib.loads(self.text)
        except tomllib.TOMLDecodeError as error:
            raise FormatError(f"the job is not a TOML file: {error}; mend that line") from None

    @cached_property
    def job(self) -> Job:
        """The job. Raises CaseError for one that makes no sense yet."""
        return job_of(self.tree, self.folder)

    def value(self, path: Path_) -> Any:
        """What stands at a path; None where nothing does."""
        held: Any = self.tree
        for key in path:
            try:
                held = held[key]
            except (KeyError, IndexError, TypeError):
                return None
        return held

    def with_value(self, path: Path_, value: Any) -> Document:
        """The document with `value` (REMOVED: nothing) at `path`, for instance ("surfaces", "roof", "kind")."""
        wanted = copy.deepcopy(self.tree)
        _put(wanted, path, value)
        table, key = _split(path)
        held: Any = wanted
        for step in (*table, key):
            held = held.get(step, REMOVED) if isinstance(held, dict) else held[step]
            if held is REMOVED:
                break
        return self._settled(_written(self.text, table, key, held), wanted)

    def with_table(self, path: Path_, table: dict[str, Any] | object) -> Document:
        """The document with a whole table at `path` (REMOVED: without it); ("receivers", n) is an entry of a list."""
        wanted = copy.deepcopy(self.tree)
        _put(wanted, path, table)
        return self._settled(_table_written(self.text, path, table), wanted)

    def _settled(self, text: str, wanted: dict[str, Any]) -> Document:
        try:
            sound = tomllib.loads(text) == wanted
        except tomllib.TOMLDecodeError:
            sound = False
        return Document(text, self.folder, self.rewritten) if sound else Document(toml_tree(wanted), self.folder, True)


def _put(tree: Any, path: Path_, value: Any) -> None:
    steps, last = path[:-1], path[-1]
    for step, follows in zip(steps, path[1:], strict=True):
        if isinstance(tree, dict) and step not in tree:
            tree[step] = [] if isinstance(follows, int) else {}
        tree = tree[step]
    if value is REMOVED:
        _take(tree, last)
    elif isinstance(tree, list) and last == len(tree):
        tree.append(value)
    else:
        tree[last] = value


def _take(tree: Any, key: Any) -> None:
    if isinstance(tree, list):
        del tree[key]
    else:
        tree.pop(key, None)


def _split(path: Path_) -> tuple[Path_, str]:
    """The table that a path lies in, as it has a head of its own in a job file, and the key below that head."""
    depth = 2 if path[0] in ("surfaces", "regions") or (len(path) > 2 and isinstance(path[1], int)) else 1
    depth = 0 if len(path) == 1 else depth
    return path[:depth], str(path[depth])


# ---------------------------------------------------------------------------------------------------------------------
# lines


def _sections(lines: Sequence[str]) -> list[tuple[Path_, int, int]]:
    """(path, first line, line after the last) of the part before any head and of every table with a head."""
    found: list[tuple[Path_, int, int]] = []
    counts: dict[Path_, int] = {}
    path: Path_ = ()
    start = 0
    for number, line in enumerate(lines):
        named = _named(line)
        if named is None:
            continue
        found.append((path, start, number))
        start, path = number, named
        if line.lstrip().startswith("[["):
            counts[named] = counts.get(named, -1) + 1
            path = (*named, counts[named])
    return [*found, (path, start, len(lines))]


def _named(line: str) -> Path_ | None:
    """The path that a head names; None for any other line."""
    if not _HEAD.match(line):
        return None
    try:
        held: Any = tomllib.loads(line)
    except tomllib.TOMLDecodeError:
        return None
    path: list[str] = []
    while held:
        [(key, held)] = held.items()
        path.append(key)
        held = held[0] if isinstance(held, list) else held
    return tuple(path)


def _written(text: str, table: Path_, key: str, value: Any) -> str:
    lines = text.split("\n")
    spans = [(start, stop) for path, start, stop in _sections(lines) if path == table]
    if not spans:
        return text if value is REMOVED else _table_written(text, table, {key: value})
    start, stop = spans[0]
    first, last = _value_lines(lines, key, start, stop)
    entry = [] if value is REMOVED else [f"{toml_key(key)} = {toml_value(value)}{_comment(lines[first:last])}"]
    return "\n".join([*lines[:first], *entry, *lines[last:]])


def _value_lines(lines: Sequence[str], key: str, start: int, stop: int) -> tuple[int, int]:
    """The lines that hold a key; an empty span behind the last filled line of the table where it is not there."""
    number = start
    filled = start
    while number < stop:
        line = lines[number]
        if line.strip() and not line.lstrip().startswith("#"):
            filled = number
            after = _value_end(lines, number, stop)
            if (held := _loaded(lines[number:after])) is not None and key in held and _named(line) is None:
                return number, after
            number = filled = after
            continue
        number += 1
    place = filled + 1 if _named(lines[min(filled, len(lines) - 1)]) is not None else filled
    return min(place, stop), min(place, stop)


def _value_end(lines: Sequence[str], number: int, stop: int) -> int:
    for after in range(number + 1, stop + 1):
        if _loaded(lines[number:after]) is not None:
            return after
    return number + 1


def _loaded(lines: Sequence[str]) -> dict[str, Any] | None:
    try:
        return tomllib.loads("\n".join(lines))
    except tomllib.TOMLDecodeError:
        return None


def _comment(lines: Sequence[str]) -> str:
    """The comment behind the last line of a value, with the blanks before it."""
    if not lines:
        return ""
    held, last = _loaded(lines), lines[-1]
    for mark in re.finditer(r"\s*#", last):
        if _loaded([*lines[:-1], last[: mark.start()]]) == held:
            return last[mark.start() :]
    return ""


def _table_written(text: str, path: Path_, table: Any) -> str:
    lines = text.split("\n")
    body = [] if table is REMOVED else _table_lines(path, table)
    for held, start, stop in _sections(lines):
        if held == path:
            return "\n".join([*lines[:start], *body, *lines[_last_filled(lines, start, stop) :]])
    place = _place(lines, path)
    before = lines[:place]
    while before and not before[-1].strip():
        before.pop()
    return "\n".join([*before, "", *body, "", *lines[place:]]) if body else text


def _last_filled(lines: Sequence[str], start: int, stop: int) -> int:
    """The line behind the last value of a table: what follows are the blanks and comments above the next head."""
    while stop > start + 1 and (not lines[stop - 1].strip() or lines[stop - 1].lstrip().startswith("#")):
        stop -= 1
    return stop


def _place(lines: Sequence[str], path: Path_) -> int:
    """Behind the last table of the same family, else at the end."""
    alike = [stop for held, _, stop in _sections(lines) if held and len(path) > 1 and held[0] == path[0]]
    return alike[-1] if alike else len(lines)


def _table_lines(path: Path_, table: dict[str, Any]) -> list[str]:
    names = ".".join(toml_key(str(step)) for step in path if isinstance(step, str))
    head = f"[[{names}]]" if isinstance(path[-1], int) else f"[{names}]"
    return [head, *(f"{toml_key(key)} = {toml_value(value)}" for key, value in table.items())]
