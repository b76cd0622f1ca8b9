"""Files named in a job become numbers: spectra, scans, cross-spectral matrices; units and amplitudes must be said."""

from __future__ import annotations

import dataclasses
import typing
from collections.abc import Iterable, Mapping
from functools import cache
from pathlib import Path
from typing import Any, cast

from murmesh.plugin.tables import UNITS, Column, read_arrays, read_column, read_scan
from murmesh.solver.case.fields import Declared, Tree
from murmesh.solver.case.motion import Motion
from murmesh.solver.case.spectrum import Spectrum
from murmesh.solver.errors import CaseError, FieldError, nearest

_READER_KEYS = ("csv", "hdf5", "column", "unit", "time_sign", "extrapolate", "lines")


def motion_tree(value: object, measure: str, where: str) -> object:
    """A motion: a number or spectrum is a uniform one; a table without `kind` says by its keys which kind it is."""
    if not isinstance(value, Mapping) or set(value) <= {"re", "im"} or value.get("kind") in Spectrum.registry:
        value = {"kind": "uniform", "value": value}
    tree = dict(value)
    if "kind" not in tree:
        tree["kind"] = "shape" if "expression" in tree else "autospectrum" if "form" in tree else "uniform"
        if "csv" in tree and not tree.keys() & {"amplitude", "form"}:
            raise FieldError(
                f'{where}: say what \'{tree["csv"]}\' holds: amplitude = "peak" or "rms" for complex values, or '
                'form = "peak", "rms" or "psd" for an autospectrum without phase'
            )
    if measure and tree.setdefault("measure", measure) != measure:
        raise FieldError(f"{where}: measure = '{tree['measure']}' contradicts the key; use {tree['measure']} = ... for it")
    return tree


def with_files(tree: Any, folder: Path, where: str) -> Any:
    """The tree with every table that names a csv or hdf5 file replaced by what the file holds."""
    if isinstance(tree, list):
        return [with_files(item, folder, f"{where}/{_item(item, i)}") for i, item in enumerate(tree)]
    if not isinstance(tree, Mapping):
        return tree
    held = {key: with_files(value, folder, f"{where}/{key}".lstrip("/")) for key, value in tree.items()}
    if not held.keys() & {"csv", "hdf5"}:
        return held
    try:
        return _from_file(held, folder)
    except CaseError as error:
        raise type(error)(f"{where}: {error}") from None


def _item(item: object, index: int) -> str:
    return str(item["name"]) if isinstance(item, Mapping) and "name" in item else str(index)


def filled(table: Mapping[str, Any], known: Iterable[str], where: str) -> None:
    """FieldError for a key of a file reference that is not known."""
    for key in table:
        if key not in known:
            raise FieldError(f"{where}: unknown key '{key}'; {nearest(key, known)}")


def _from_file(table: Tree, folder: Path) -> Tree:
    kind = str(table.get("kind", "table"))
    own = _fields_of(kind)
    filled(table, {"kind", *own, *_READER_KEYS} if own else table, f"kind '{kind}' from a file")
    reader = {key: table.pop(key) for key in _READER_KEYS if key in table and (key not in own or key == "csv")}
    path = folder / str(reader.get("csv", reader.get("hdf5")))
    if kind == "scan":
        return _scan(table, reader, path)
    if kind == "cross_spectrum":
        held = read_arrays(path, ("frequencies", "values"))
        return {**table, **{name: array for name, (array, _) in held.items()}}
    if "hdf5" in reader:
        raise FieldError(f"'{path.name}': a spectrum is read from csv; hdf5 is for kind = 'scan' and 'cross_spectrum'")
    column = read_column(path, str(reader.get("column", "")), str(reader.get("unit", "")), str(reader.get("time_sign", "+")))
    if kind in Spectrum.registry:
        return {**table, "kind": kind, **_spectrum(kind, column, reader)}
    field = _spectrum_field(kind)
    if kind in Motion.registry:
        _settle_motion(table, column.unit, column.measures, path.name)
    _settle_unit(table, own, column, path.name)
    # `lines = true`: the rows are tones, with nothing between them
    shape = "lines" if reader.get("lines") else "table"
    return {**table, field: {"kind": shape, **_spectrum(shape, column, reader)}}


def _spectrum(kind: str, column: Column, reader: Tree) -> Tree:
    tree: Tree = {"frequencies": column.frequencies, "values": column.values}
    if kind == "table" and "extrapolate" in reader:
        tree["extrapolate"] = reader["extrapolate"]
    return tree


def _scan(table: Tree, reader: Tree, path: Path) -> Tree:
    points, frequencies, values, unit = read_scan(path, str(reader.get("unit", "")), str(reader.get("time_sign", "+")))
    if "amplitude" not in table:
        raise FieldError(f'\'{path.name}\': say amplitude = "peak" or "rms"; a scan holds complex values')
    _settle_motion(table, unit, _measures(unit), path.name)
    return {**table, "points": points, "frequencies": frequencies, "values": values}


def _measures(unit: str) -> str:
    return UNITS[unit][1] if unit else ""


def _settle_motion(table: Tree, unit: str, measures: str, name: str) -> None:
    """A motion from a file says its unit, and the unit says whether it is a velocity, an acceleration, or a density."""
    if not unit:
        raise FieldError(f"'{name}': the unit is not said; write it behind the column, roof_re [mm/s], or as unit = \"mm/s\"")
    what, density = measures.removesuffix(" psd"), measures.endswith(" psd")
    if what not in ("velocity", "acceleration"):
        raise FieldError(f"'{name}': the unit {unit} is one of {measures}, not of velocity or acceleration")
    if table.setdefault("measure", what) != what:
        raise FieldError(f"'{name}': the unit {unit} is one of {what}, but measure = '{table['measure']}'; mend one")
    if density != (table.get("form") == "psd"):
        raise FieldError(f"'{name}': the unit {unit} and form = '{table.get('form', '')}' contradict each other; mend one")


def _settle_unit(table: Tree, own: frozenset[str], column: Column, name: str) -> None:
    """A law with a unit of its own takes it from the header or says it itself, never both in two ways."""
    if "unit" in own and not column.unit and "unit" not in table:
        raise FieldError(
            f'\'{name}\': the unit is not said; write it behind the column, re [Pa.s/m], or as unit = "Pa.s/m" or "rho_c"'
        )
    if "unit" in own and column.unit and table.setdefault("unit", column.unit) != column.unit:
        raise FieldError(f"'{name}' is in {column.unit}, but unit = '{table['unit']}' is stated; mend one of the two")


@cache
def _members() -> tuple[type[Declared], ...]:
    return tuple(member for family in Declared.__subclasses__() for member in getattr(family, "registry", {}).values())


def _fields_of(kind: str) -> frozenset[str]:
    found = [{f.name for f in dataclasses.fields(cast(Any, m))} for m in _members() if m.kind_name == kind]
    return frozenset().union(*found)


def _spectrum_field(kind: str) -> str:
    """The one field of a kind that may be a spectrum: the file goes there."""
    found = [
        name
        for member in _members()
        if member.kind_name == kind
        for name, target in typing.get_type_hints(member).items()
        if Spectrum in typing.get_args(target)
    ]
    if len(found) != 1:
        raise FieldError(f"kind '{kind}' takes no file; put the reference where its spectrum stands, {{csv = ...}}")
    return found[0]
