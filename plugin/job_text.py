"""A job as text: the TOML file beside a model, and the line of JSON inside one.

The keys are the fields of the declared records, so a new kind needs nothing here. On top of the fields stand:

    [surfaces.NAME]  the keys of the kind, where, and velocity, acceleration, pressure, wave (a load of "default")
    {csv = "f.csv", column = "roof", unit = "mm/s"}      wherever a spectrum, a motion or a wall law may stand;
                                                         lines = true: its rows are tones, with nothing between them
    {kind = "scan", csv | hdf5 = ...}, {kind = "cross_spectrum", hdf5 = ...}
    panels = {csv = "panels.csv", ...}                   in a load case: one surface velocity per column
    [sweep] start, stop, step, extra                     instead of frequencies
"""

from __future__ import annotations

import dataclasses
import fnmatch
import json
import tomllib
from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import Any, cast

import numpy as np

from murmesh.plugin.job import Job, is_glob
from murmesh.plugin.job_files import filled, motion_tree, with_files
from murmesh.plugin.tables import quantity_names, read_levels
from murmesh.solver.case.boundary import Boundary
from murmesh.solver.case.fields import Tree, from_tree, to_tree
from murmesh.solver.case.model import Sweep
from murmesh.solver.errors import CaseError, FieldError, FormatError, nearest

HEADER = """\
# A murmesh job. Units: SI (m, s, kg, Pa, m/s, Hz; temperatures in degrees Celsius). Time factor e^{+iwt}; complex
# numbers are {re, im}; amplitudes are peak unless a motion says rms or psd; positive = the surface moves into the air.
# Impedance Z = p / (velocity into the wall), its unit stated. Levels: dB re 20 uPa, rms.
"""
_LOAD_KEYS = ("velocity", "acceleration", "pressure", "wave")
_GRID = ("start", "stop", "step", "extra")
_NAMED = ("regions", "surfaces")


def read_toml(path: Path) -> Job:
    """The job in `path`; files it names are taken from its folder."""
    if not path.is_file():
        raise FormatError(f"there is no job file '{path}'; check the path")
    try:
        tree = tomllib.loads(path.read_text(encoding="utf-8"))
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise FormatError(f"'{path}' is not a TOML file: {error}; mend that line") from None
    try:
        return job_of(tree, path.parent)
    except CaseError as error:
        raise type(error)(f"{path.name}: {error}") from None


def job_of(tree: Mapping[str, Any], folder: str | Path = ".") -> Job:
    """The job of a TOML tree."""
    return cast(Job, from_tree(Job, _expand(dict(tree), Path(folder)), "job"))


def read_json(text: str) -> Job:
    """The job of one line of JSON."""
    try:
        tree = json.loads(text)
    except json.JSONDecodeError as error:
        raise FormatError(f"the stored job is not JSON: {error}; store it anew from the gmsh script") from None
    return cast(Job, from_tree(Job, numbers(tree), "stored job"))


def json_text(job: Job) -> str:
    """One line of JSON: gmsh splits attributes at line ends."""
    return json.dumps(plain(to_tree(job)), ensure_ascii=False)


# ---------------------------------------------------------------------------------------------------------------------
# TOML -> tree


def _expand(tree: Tree, folder: Path) -> Tree:
    """The tree of a Job: tables by name become lists, shorthands become loads, and files become numbers."""
    tree = numbers(tree)
    loads: list[Tree] = []
    if "loads" in tree:
        tree["loads"] = _load_table(_table(tree["loads"], "loads"), folder, "loads")
    if "regions" in tree:
        held = _table(tree["regions"], "regions")
        tree["regions"] = [{"name": name, **_table(r, f"regions/{name}")} for name, r in held.items()]
    if "surfaces" in tree:
        held = _table(tree["surfaces"], "surfaces")
        tree["surfaces"] = [_surface(name, s, loads, folder) for name, s in held.items()]
    tree["load_cases"] = [
        _load_table(_table(case, f"load_cases/{i}"), folder, f"load_cases/{i}")
        for i, case in enumerate(_list(tree.get("load_cases", []), "load_cases"))
    ]
    if "sweep" in tree:
        tree["sweep"] = _sweep(_table(tree["sweep"], "sweep"))
    tree["receivers"] = [_receiver(r, folder) for r in _list(tree.get("receivers", []), "receivers")]
    tree = cast(Tree, with_files(tree, folder, ""))
    if loads:
        own = tree.setdefault("loads", {})
        own["loads"] = [*own.get("loads", []), *loads]
    return tree


def _table(value: object, where: str) -> Tree:
    if not isinstance(value, Mapping):
        raise FieldError(f"{where}: expected a table, got {value!r}")
    return dict(value)


def _list(value: object, where: str) -> list[Any]:
    if not isinstance(value, list):
        raise FieldError(f"{where}: expected a list of tables, written [[{where}]], got {value!r}")
    return value


def _surface(name: str, given: object, loads: list[Tree], folder: Path) -> Tree:
    """The kind's own keys go into `boundary`; what drives the surface goes into `loads`."""
    where = f"surfaces/{name}"
    table = _table(given, where)
    entry: Tree = {"name": name}
    if "where" in table:
        entry["where"] = table.pop("where")
    driven = {key: table.pop(key) for key in _LOAD_KEYS if key in table}
    _require_known(table, where)
    entry["boundary"] = table
    for key, value in driven.items():
        loads += _surface_loads(key, name, value, folder, f"{where}/{key}")
    return entry


def _require_known(table: Tree, where: str) -> None:
    """An unknown key is compared with the kind's keys and with those of every surface."""
    member = Boundary.registry.get(str(table.get("kind", "")))
    if member is None:
        return
    known = ["kind", "where", *_LOAD_KEYS, *(field.name for field in dataclasses.fields(cast(Any, member)))]
    for key in table:
        if key not in known:
            raise FieldError(f"{where}: unknown key '{key}'; {nearest(key, known)}")


def _surface_loads(key: str, name: str, value: object, folder: Path, where: str) -> Iterator[Tree]:
    if key in ("pressure", "wave"):
        kind = {"pressure": "surface_pressure", "wave": "incoming_wave"}[key]
        yield {"kind": kind, "surface": name, "pressure": with_files(value, folder, where)}
        return
    if isinstance(value, Mapping) and value.get("column") == "{surface}":
        for column in _columns_for(name, folder / str(value.get("csv", "")), where):
            yield _velocity(column, motion_tree({**value, "column": column}, key, where), folder, where)
        return
    yield _velocity(name, motion_tree(value, key, where), folder, where)


def _velocity(surface: str, motion: object, folder: Path, where: str) -> Tree:
    return {"kind": "surface_velocity", "surface": surface, "motion": with_files(motion, folder, where)}


def _columns_for(pattern: str, path: Path, where: str) -> list[str]:
    names = quantity_names(path)
    found = [n for n in names if n == pattern or (is_glob(pattern) and fnmatch.fnmatchcase(n, pattern))]
    if not found:
        raise FieldError(f"{where}: '{path.name}' has no column for '{pattern}'; {nearest(pattern, names)}")
    return found


def _load_table(table: Tree, folder: Path, where: str) -> Tree:
    """A load case: motions may be numbers or files, and `panels` gives a velocity per column of a CSV."""
    loads = []
    for index, load in enumerate(_list(table.get("loads", []), f"{where}/loads")):
        entry = _table(load, f"{where}/loads/{index}")
        if "motion" in entry:
            at = f"{where}/loads/{entry.get('surface', index)}/motion"
            entry["motion"] = with_files(motion_tree(entry["motion"], "", at), folder, at)
        loads.append(entry)
    if "panels" in table:
        at = f"{where}/panels"
        panels = _table(table.pop("panels"), at)
        if "csv" not in panels:
            raise FieldError(f"{at}: 'csv' is missing (a file with a column, or a pair of them, per panel)")
        for column in _columns_for("*", folder / str(panels["csv"]), at):
            loads.append(_velocity(column, motion_tree({**panels, "column": column}, "", at), folder, at))
    return {**table, "loads": loads}


def _sweep(table: Tree) -> Tree:
    grid = {key: table.pop(key) for key in _GRID if key in table}
    known = [*_GRID, *(field.name for field in dataclasses.fields(cast(Any, Sweep)))]
    for key in table:
        if key not in known:
            raise FieldError(f"sweep: unknown key '{key}'; {nearest(key, known)}")
    if not grid:
        return table
    if "frequencies" in table:
        raise FieldError(f"sweep: frequencies and {', '.join(grid)} are both given; keep one of the two ways")
    for key in _GRID[:3]:
        if not isinstance(grid.get(key), int | float):
            raise FieldError(f"sweep: '{key}' [Hz] is missing or no number; give start, stop and step, or frequencies")
    extra = np.asarray(grid.get("extra", []), dtype=np.float64)
    table["frequencies"] = Sweep.grid(grid["start"], grid["stop"], grid["step"], extra).frequencies
    return table


def _receiver(given: object, folder: Path) -> Tree:
    table = _table(given, "receivers")
    measured = table.get("measured")
    if isinstance(measured, str):
        measured = {"csv": measured}
    if isinstance(measured, Mapping) and "csv" in measured:
        where = f"receivers/{table.get('name', '')}/measured"
        filled(measured, ("csv", "column"), where)
        frequencies, levels = read_levels(folder / str(measured["csv"]), str(measured.get("column", "")))
        table["measured"] = {"frequencies": frequencies, "levels": levels}
    return table


# ---------------------------------------------------------------------------------------------------------------------
# numbers


def numbers(tree: Any) -> Any:
    """{re = [...], im = [...]} as complex arrays, everywhere."""
    if isinstance(tree, Mapping):
        if set(tree) == {"re", "im"} and isinstance(tree["re"], list):
            return np.asarray(tree["re"], dtype=np.float64) + 1j * np.asarray(tree["im"], dtype=np.float64)
        return {key: numbers(value) for key, value in tree.items()}
    return [numbers(value) for value in tree] if isinstance(tree, list) else tree


def plain(tree: Any) -> Any:
    """The tree in str, bool, int, float, lists and tables."""
    if isinstance(tree, Mapping):
        return {key: plain(value) for key, value in tree.items()}
    if isinstance(tree, list):
        return [plain(value) for value in tree]
    if isinstance(tree, np.ndarray):
        return {"re": tree.real.tolist(), "im": tree.imag.tolist()} if tree.dtype.kind == "c" else tree.tolist()
    return {"re": tree.real, "im": tree.imag} if isinstance(tree, complex) else tree


# ---------------------------------------------------------------------------------------------------------------------
# tree -> TOML


def toml_text(job: Job) -> str:
    """The job as a TOML file, its conventions in the head."""
    tree = plain(to_tree(job))
    for name in _NAMED:
        tree[name] = {entry.pop("name"): entry for entry in tree.get(name, [])}
    tree["surfaces"] = {name: entry.pop("boundary") | entry for name, entry in tree["surfaces"].items()}
    return toml_tree(tree)


def toml_tree(tree: Tree) -> str:
    """The TOML file of a tree as `job_of` reads it, without the comments it may have had."""
    head = [f"{key} = {toml_value(value)}" for key, value in tree.items() if not isinstance(value, dict | list)]
    parts = [HEADER + "\n".join(head)]
    for key, value in tree.items():
        if isinstance(value, dict):
            parts += _tables(key, value) if key in _NAMED else [_section(f"[{key}]", value)]
        elif isinstance(value, list):
            parts += [_section(f"[[{key}]]", item) for item in value]
    return "\n\n".join(parts) + "\n"


def _tables(key: str, entries: Tree) -> list[str]:
    return [_section(f"[{key}.{toml_key(name)}]", entry) for name, entry in entries.items()]


def _section(head: str, table: Tree) -> str:
    return "\n".join([head, *(f"{toml_key(key)} = {toml_value(value)}" for key, value in table.items())])


def toml_key(name: str) -> str:
    """A key as TOML writes it."""
    bare = name.isascii() and name.replace("_", "").replace("-", "").isalnum()
    return name if bare else json.dumps(name, ensure_ascii=False)


_WRITERS: dict[type, Callable[[Any], str]] = {
    bool: lambda value: "true" if value else "false",
    int: str,
    float: repr,
    str: lambda value: json.dumps(value, ensure_ascii=False),
    list: lambda value: f"[{', '.join(toml_value(item) for item in value)}]",
    dict: lambda value: "{" + ", ".join(f"{toml_key(key)} = {toml_value(item)}" for key, item in value.items()) + "}",
}


def toml_value(value: Any) -> str:
    """A value as TOML writes it, on one line."""
    return _WRITERS[type(value)](value)
