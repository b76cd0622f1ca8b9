"""Measured tables: spectra, levels and scan points from CSV and HDF5, with units and conventions said.

A CSV has a header. One column is the frequency; a quantity is one of

    NAME_re, NAME_im  |  NAME_magnitude, NAME_phase_deg  |  NAME            (and the same without NAME)

so that one file can hold a column (or a pair) per panel. A unit may stand in brackets behind a name, `roof_re [mm/s]`.
Fields are parted by commas, semicolons or tabs; with the last two a decimal comma is understood. `#` starts a comment.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.hdf5 import open_hdf5
from murmesh.solver.errors import FieldError, FormatError, nearest

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]

G = 9.80665  # standard gravity [m/s2], CGPM 1901
UNITS: dict[str, tuple[float, str]] = {
    "m/s": (1.0, "velocity"), "mm/s": (1e-3, "velocity"), "um/s": (1e-6, "velocity"),
    "m/s2": (1.0, "acceleration"), "mm/s2": (1e-3, "acceleration"), "g": (G, "acceleration"),
    "(m/s)2/Hz": (1.0, "velocity psd"), "(mm/s)2/Hz": (1e-6, "velocity psd"),
    "(m/s2)2/Hz": (1.0, "acceleration psd"), "g2/Hz": (G**2, "acceleration psd"),
    "Pa": (1.0, "pressure"), "mPa": (1e-3, "pressure"), "kPa": (1e3, "pressure"),
    "m3/s": (1.0, "volume velocity"), "l/s": (1e-3, "volume velocity"),
    "rho_c": (1.0, "impedance"), "Pa.s/m": (1.0, "impedance"),
    "dB": (1.0, "level"), "s": (1.0, "time"), "ms": (1e-3, "time"), "1": (1.0, "ratio"), "%": (0.01, "ratio"),
    "m": (1.0, "length"), "mm": (1e-3, "length"), "cm": (1e-2, "length"),
    "Hz": (1.0, "frequency"), "kHz": (1e3, "frequency"),
}  # fmt: skip
"""Unit -> (factor to SI, what it measures)."""
_FREQUENCY = ("frequency", "freq", "f", "frequency_hz", "hz")
_PARTS = {"re": "re", "real": "re", "im": "im", "imag": "im", "magnitude": "magnitude", "mag": "magnitude",
          "phase_deg": "phase_deg", "phase_rad": "phase_rad", "value": "value", "level": "value"}  # fmt: skip
_SPLIT = re.compile(r"^(?:(?P<name>.*)[ _.:])?(?P<part>" + "|".join(_PARTS) + r")$", re.IGNORECASE)


@dataclass(frozen=True, eq=False)
class Column:
    """One quantity over frequency [SI], complex or real, with the unit it was given in ("" if none was said)."""

    frequencies: Floats
    values: Complex
    unit: str
    real: bool

    @property
    def measures(self) -> str:
        """What its unit measures: velocity, acceleration, pressure ..., or nothing."""
        return UNITS[self.unit][1] if self.unit else ""


@dataclass(frozen=True, eq=False)
class Sheet:
    """A CSV as columns of numbers by header, and the units in the headers."""

    path: Path
    columns: Mapping[str, Floats]
    units: Mapping[str, str]

    def find(self, names: tuple[str, ...], what: str) -> str:
        """The header that is one of `names`, in any case."""
        for header in self.columns:
            if header.lower() in names:
                return header
        raise FormatError(f"'{self.path}' has no column for the {what}; name one '{names[0]}'. {_has(self)}")

    def scaled(self, header: str, default: str) -> Floats:
        """A column in SI by its own unit or `default`."""
        return self.columns[header] * UNITS[self.units.get(header) or default][0]


def read_csv(path: str | Path) -> Sheet:
    """A CSV as numbers; FormatError names the line and the column of what is none."""
    path = Path(path)
    if not path.is_file():
        raise FormatError(f"there is no file '{path}'; paths are taken from the folder of the job file")
    try:
        text = path.read_text(encoding="utf-8-sig")
    except UnicodeDecodeError:
        raise FormatError(f"'{path}' is not a text file in UTF-8; export it as CSV (UTF-8)") from None
    numbered = enumerate(text.splitlines(), 1)
    lines = [(number, line) for number, line in numbered if line.strip() and not line.lstrip().startswith("#")]
    if len(lines) < 2:
        raise FormatError(f"'{path}' has no header with rows below it; write one, e.g. frequency, re, im")
    mark = next((m for m in (";", "\t", ",") if m in lines[0][1]), ",")
    header = [_header(cell, path) for cell in next(csv.reader([lines[0][1]], delimiter=mark))]
    names = [name for name, _ in header]
    rows = [_row(path, number, next(csv.reader([line], delimiter=mark)), names, mark) for number, line in lines[1:]]
    table = np.array(rows, dtype=np.float64)
    if len(set(names)) < len(names):
        raise FormatError(f"'{path}' has two columns of the same name; rename one. Columns: {', '.join(names)}")
    return Sheet(path, {name: table[:, i] for i, name in enumerate(names)}, dict(header))


def _header(cell: str, path: Path) -> tuple[str, str]:
    match = re.match(r"^(.*?)\s*[\[(]([^\[\]]+)[\])]$", cell.strip()) if cell.strip().endswith("]") else None
    name, unit = (match.group(1), match.group(2).strip()) if match else (cell.strip(), "")
    if unit in ("deg", "rad"):
        return name, ""
    if unit and unit not in UNITS:
        raise FormatError(f"'{path}': column '{cell.strip()}' has an unknown unit; {nearest(unit, UNITS)}")
    return name, unit


def _row(path: Path, number: int, cells: list[str], names: list[str], mark: str) -> list[float]:
    if len(cells) != len(names):
        raise FormatError(f"'{path}', line {number}: {len(cells)} fields, the header has {len(names)}; complete the row")
    values = []
    for name, cell in zip(names, cells, strict=True):
        try:
            values.append(float(cell.strip().replace(",", ".") if mark != "," else cell))
        except ValueError:
            raise FormatError(f"'{path}', line {number}, column '{name}': '{cell.strip()}' is not a number") from None
    if not np.all(np.isfinite(values)):
        raise FormatError(f"'{path}', line {number}: a field is not finite; give a number or drop the row")
    return values


def _has(sheet: Sheet) -> str:
    return f"Columns: {', '.join(sheet.columns)}."


def _quantities(sheet: Sheet) -> dict[str, dict[str, str]]:
    """Headers by quantity and part; the name is empty where a header is a bare `re`, `im` ..."""
    found: dict[str, dict[str, str]] = {}
    for header in sheet.columns:
        if header.lower() in _FREQUENCY:
            continue
        match = _SPLIT.match(header)
        name, part = (match["name"] or "", _PARTS[match["part"].lower()]) if match else (header, "value")
        found.setdefault(name, {})[part] = header
    for name, parts in list(found.items()):
        if set(parts) == {"re"} and name:  # a panel whose own name ends in "re" has no partner
            found[parts["re"]] = {"value": found.pop(name)["re"]}
    return found


def quantity_names(path: str | Path) -> tuple[str, ...]:
    """Names of the quantities in a CSV with a column, or a pair of them, per panel."""
    return tuple(name for name in _quantities(read_csv(path)) if name)


def read_column(path: str | Path, column: str = "", unit: str = "", time_sign: str = "+") -> Column:
    """One quantity of a CSV in SI. `column` may be left out where there is only one; time sign '-' is conjugated.

    Raises FormatError for the file, FieldError for a column or unit that is not known or contradicts the header.
    """
    sheet = read_csv(path)
    at = sheet.find(_FREQUENCY, "frequency")
    known = _quantities(sheet)
    if column not in known:
        if column or len(known) != 1:
            asked = f"no quantity '{column}'" if column else "several quantities: say which with column = ..."
            raise FieldError(f"'{path}' has {asked}; {nearest(column, [name or 're/im' for name in known])}")
        column = next(iter(known))
    parts = known[column]
    frequencies = sheet.scaled(at, "Hz")
    if np.any(frequencies <= 0) or np.any(np.diff(frequencies) <= 0):
        raise FormatError(f"'{path}': the column '{at}' must rise strictly from above 0; sort it and drop duplicates")
    own = _unit(sheet, parts, unit)
    values = _combine(sheet, parts, column) * (UNITS[own][0] if own else 1.0)
    if time_sign not in ("+", "-"):
        raise FieldError(f"time_sign '{time_sign}' is not a choice; '+' for e^(+iwt), '-' for e^(-iwt)")
    return Column(frequencies, values.conj() if time_sign == "-" else values, own, set(parts) == {"value"})


def _unit(sheet: Sheet, parts: Mapping[str, str], stated: str) -> str:
    if stated and stated not in UNITS:
        raise FieldError(f"unit '{stated}' is not known; {nearest(stated, UNITS)}")
    written = {sheet.units[header] for part, header in parts.items() if not part.startswith("phase")} - {""}
    if len(written | ({stated} - {""})) > 1:
        both = ", ".join(sorted(written | {stated} - {""}))
        raise FieldError(f"'{sheet.path}': the units of {', '.join(parts.values())} contradict ({both}); say one")
    return stated or next(iter(written), "")


def _combine(sheet: Sheet, parts: Mapping[str, str], column: str) -> Complex:
    held = {part: sheet.columns[header] for part, header in parts.items()}
    match frozenset(held):
        case s if s == {"re", "im"}:
            values: Any = held["re"] + 1j * held["im"]
        case s if s == {"magnitude", "phase_deg"}:
            values = held["magnitude"] * np.exp(1j * np.deg2rad(held["phase_deg"]))
        case s if s == {"magnitude", "phase_rad"}:
            values = held["magnitude"] * np.exp(1j * held["phase_rad"])
        case s if s == {"value"}:
            values = held["value"]
        case _:
            raise FormatError(
                f"'{sheet.path}': quantity '{column}' has the columns {', '.join(sorted(parts.values()))}; expected re "
                "and im, magnitude and phase_deg, or a single column"
            )
    return np.asarray(values, dtype=np.complex128)


def read_levels(path: str | Path, column: str = "") -> tuple[Floats, Floats]:
    """Frequencies [Hz] and levels [dB re 20 uPa] of a measured spectrum."""
    table = read_column(path, column)
    if not table.real or table.unit not in ("", "dB"):
        raise FieldError(f"'{path}': a measured spectrum is one column of levels in dB re 20 uPa (rms); convert it")
    return table.frequencies, table.values.real


def read_scan(path: str | Path, unit: str = "", time_sign: str = "+") -> tuple[Floats, Floats, Complex, str]:
    """Scan points (m, 3) [m], frequencies (nf,), values (nf, m) [SI], and their unit.

    CSV: one row per point and frequency, columns x, y, z, frequency, and re, im (or magnitude, phase_deg).
    HDF5: datasets points, frequencies, values (complex); an attribute `unit` at points and values is honoured.
    """
    path = Path(path)
    points, frequencies, values, own = _scan_csv(path, unit) if path.suffix == ".csv" else _scan_hdf5(path, unit)
    return points, frequencies, values.conj() if time_sign == "-" else values, own


def _scan_csv(path: Path, unit: str) -> tuple[Floats, Floats, Complex, str]:
    sheet = read_csv(path)
    places = np.stack([sheet.scaled(sheet.find((axis,), f"coordinate {axis}"), "m") for axis in "xyz"], axis=1)
    lines = sheet.scaled(sheet.find(_FREQUENCY, "frequency"), "Hz")
    parts = {part: header for name, held in _quantities(sheet).items() if not name for part, header in held.items()}
    own = _unit(sheet, parts, unit)
    given = _combine(sheet, parts, "re/im") * (UNITS[own][0] if own else 1.0)
    points, point = np.unique(places, axis=0, return_inverse=True)
    frequencies, line = np.unique(lines, return_inverse=True)
    count = np.zeros((len(frequencies), len(points)), dtype=np.int64)
    np.add.at(count, (line, point.reshape(-1)), 1)
    if np.any(count != 1):
        f, p = np.argwhere(count != 1)[0]
        x, y, z = points[p]
        raise FormatError(
            f"'{path}': the point ({x:g}, {y:g}, {z:g}) m has {count[f, p]} rows at {frequencies[f]:g} Hz, expected one"
            "; every point needs every frequency once"
        )
    values = np.empty(count.shape, dtype=np.complex128)
    values[line, point.reshape(-1)] = given
    return points, frequencies, values, own


def _scan_hdf5(path: Path, unit: str) -> tuple[Floats, Floats, Complex, str]:
    held = read_arrays(path, ("points", "frequencies", "values"))
    length, own = held["points"][1] or "m", unit or held["values"][1]
    for given in (length, own):
        if given and given not in UNITS:
            raise FieldError(f"'{path}': unit '{given}' is not known; {nearest(given, UNITS)}")
    points = np.asarray(held["points"][0], dtype=np.float64) * UNITS[length][0]
    values = np.asarray(held["values"][0], dtype=np.complex128) * (UNITS[own][0] if own else 1.0)
    return points, np.asarray(held["frequencies"][0], dtype=np.float64), values, own


def read_arrays(path: str | Path, names: tuple[str, ...]) -> dict[str, tuple[npt.NDArray[Any], str]]:
    """Named datasets of an HDF5 file and their attribute `unit`; complex data may be split into NAME_re and NAME_im."""
    with open_hdf5(path) as file:
        found: dict[str, tuple[npt.NDArray[Any], str]] = {}
        for name in names:
            if f"{name}_re" in file and f"{name}_im" in file:
                array = file[f"{name}_re"][()] + 1j * file[f"{name}_im"][()]
                found[name] = array, str(file[f"{name}_re"].attrs.get("unit", ""))
            elif name in file:
                found[name] = file[name][()], str(file[name].attrs.get("unit", ""))
            else:
                raise FormatError(f"'{path}' has no dataset '{name}'; expected {', '.join(names)}. It has: {', '.join(file)}")
        return found
