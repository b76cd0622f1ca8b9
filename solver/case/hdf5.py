"""The neutral HDF5 case, written and read by reflection over the declared fields.

The layout follows the records of `model.py` to the letter, so the declarations are its documentation (the reference
table in DEVELOPERS.md is generated from them):

- a record is a group; a number, text or short list is an attribute; an array is a dataset;
- a member of a family carries its name in the attribute `kind`;
- a list of records is a group with one child group per entry: `name` (or its number) with an attribute `index`;
- what is absent takes the default of its field; what is unknown is an error.

Root attributes: `format` = "murmesh case", `version`, and the conventions in words. Reading runs no code.
"""

from __future__ import annotations

import os
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any, cast

import h5py
import numpy as np

from murmesh.solver.case.fields import Tree, from_tree, to_tree
from murmesh.solver.case.model import Case
from murmesh.solver.errors import CaseError, FormatError

FORMAT = "murmesh case"
VERSION = 1
CONVENTIONS = {
    "time_factor": "exp(+i omega t)",
    "amplitudes": "complex peak amplitudes",
    "normal": "out of the fluid; motions say which way is positive (positive = into_air unless stated)",
    "units": "SI: m, s, kg, Pa, m/s, Hz; temperatures in degrees Celsius",
    "impedance": "Z = p / (v_n - v_s), velocity into the wall; unit stated with each law",
    "levels": "rms, dB re 20 uPa",
}
_LIST = "list"
_COMPRESS_ABOVE = 4096


def write_atomically(path: Path, write: Callable[[h5py.File], None]) -> None:
    """Write an HDF5 file beside `path` and rename it, so that `path` is never half written."""
    path = Path(path)
    if not path.parent.is_dir():
        raise FormatError(f"cannot write '{path}': the folder '{path.parent}' does not exist; make it first")
    handle, name = tempfile.mkstemp(prefix=f".{path.name}.", suffix=".part", dir=path.parent)
    os.close(handle)
    try:
        with h5py.File(name, "w") as file:
            write(file)
        os.chmod(name, 0o666 & ~_umask())
        os.replace(name, path)
    except BaseException:
        Path(name).unlink(missing_ok=True)
        raise


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def write_case(case: Case, path: str | Path) -> None:
    """Write `case` to `path` atomically."""
    write_atomically(Path(path), lambda file: write_case_group(case, file))


def read_case(path: str | Path) -> Case:
    """The case in `path`.

    Raises FormatError for a file that is missing, truncated, foreign or of a newer version, and CaseError naming the
    group for one whose content is inconsistent.
    """
    with open_hdf5(path) as file:
        try:
            return read_case_group(file)
        except CaseError as error:
            raise type(error)(f"{path}: {error}") from None


def open_hdf5(path: str | Path) -> h5py.File:
    """An HDF5 file opened for reading; FormatError that says what is wrong with it."""
    if not Path(path).is_file():
        raise FormatError(f"there is no file '{path}'; check the path")
    try:
        return h5py.File(path, "r")
    except OSError as error:
        raise FormatError(f"'{path}' is not a readable HDF5 file (truncated or foreign): {error}; write it anew") from None


def write_case_group(case: Case, group: h5py.Group) -> None:
    """Write `case` into an open HDF5 group."""
    group.attrs["format"], group.attrs["version"] = FORMAT, VERSION
    for name, text in CONVENTIONS.items():
        group.attrs[f"convention_{name}"] = text
    group.attrs["checksum"] = case.checksum
    _write_tree(group, to_tree(case))


def read_case_group(group: h5py.Group) -> Case:
    """The case held by an open HDF5 group."""
    check_header(group, FORMAT, VERSION)
    try:
        tree = _read_tree(group)
    except (OSError, RuntimeError, KeyError) as error:
        raise FormatError(f"a dataset of group '{group.name}' cannot be read ({error}); write the file anew") from None
    for name in ("format", "version", "checksum", *(f"convention_{key}" for key in CONVENTIONS)):
        tree.pop(name, None)
    return cast(Case, from_tree(Case, tree, group.name.rstrip("/")))


def check_header(group: h5py.Group, expected: str, version: int) -> None:
    """FormatError unless the group says that it is `expected` of at most `version`."""
    found = _attribute(group.attrs.get("format"))
    if found != expected:
        raise FormatError(f"group '{group.name}' is not a {expected}: its attribute 'format' is {found!r}")
    number = int(group.attrs.get("version", 0))
    if number > version:
        raise FormatError(
            f"group '{group.name}' has version {number} of the {expected}; this murmesh reads up to {version}; update it"
        )


def _write_tree(group: h5py.Group, tree: Tree) -> None:
    for key, value in tree.items():
        if isinstance(value, dict):
            _write_tree(group.create_group(key), value)
        elif isinstance(value, list) and value and isinstance(value[0], dict):
            _write_list(group.create_group(key), value)
        elif isinstance(value, np.ndarray):
            packed = value.size > _COMPRESS_ABOVE
            group.create_dataset(key, data=value, compression="gzip" if packed else None, shuffle=packed)
        elif isinstance(value, list):
            group.attrs[key] = value if value else np.empty(0)
        else:
            group.attrs[key] = value


def _write_list(group: h5py.Group, items: list[Tree]) -> None:
    group.attrs[_LIST] = True
    names = [str(item.get("name", "")).replace("/", "|") for item in items]
    for index, (item, name) in enumerate(zip(items, names, strict=True)):
        child = group.create_group(name if name and names.count(name) == 1 else f"{index:04d}")
        child.attrs["index"] = index
        _write_tree(child, item)


def _read_tree(group: h5py.Group) -> Tree:
    tree: Tree = {key: _attribute(value) for key, value in group.attrs.items() if key not in (_LIST, "index")}
    for key, child in group.items():
        if isinstance(child, h5py.Dataset):
            tree[key] = child[()]
        elif child.attrs.get(_LIST, False):
            items = sorted(child.values(), key=lambda item: int(item.attrs.get("index", 0)))
            tree[key] = [_read_tree(item) for item in items]
        else:
            tree[key] = _read_tree(child)
    return tree


def _attribute(value: Any) -> Any:
    """An attribute as plain Python; texts of fixed length, as many programs write them, come as bytes."""
    if isinstance(value, np.ndarray):
        return [_attribute(item) for item in value.tolist()]
    if isinstance(value, np.generic):
        value = value.item()
    return value.decode() if isinstance(value, bytes) else value
