"""Finished work of a sweep, kept beside the result so that an interrupted sweep goes on where it stopped.

A folder with one file per finished line, and one per step of a reduced model; each is written beside and renamed, so that
a file is whole or not there.
"""

from __future__ import annotations

import hashlib
import shutil
import zipfile
from collections.abc import Iterator
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from murmesh.solver.engine import EMPTY, NO_FORM, Line, Response
from murmesh.solver.errors import ResultError
from murmesh.solver.reduced import Check, Step

Arrays = dict[str, npt.NDArray[np.generic]]
_DAMAGED = (OSError, EOFError, ValueError, KeyError, zipfile.BadZipFile)


@dataclass(frozen=True)
class Journal:
    """The folder of one sweep."""

    folder: Path

    @classmethod
    def open(cls, folder: Path, what: str) -> Journal:
        """Open or make the folder for the sweep that `what` tells from all others.

        Raises: ResultError if it belongs to another sweep, or is a file.
        """
        folder = Path(folder)
        if folder.is_file():
            raise ResultError(f"'{folder}' is a file, but finished lines need a folder of their own; remove or rename it")
        key = hashlib.sha256(what.encode()).hexdigest()
        stamp = folder / "case"
        if stamp.is_file() and stamp.read_text() != key:
            raise ResultError(
                f"'{folder}' holds finished lines of another case or order; remove the folder to start afresh, or go back "
                "to the case it belongs to"
            )
        folder.mkdir(parents=True, exist_ok=True)
        if not stamp.is_file():
            part = folder / "case.part"
            part.write_text(key)
            part.replace(stamp)
        return cls(folder)

    @staticmethod
    def at(result: Path) -> Path:
        """The journal's folder for a result file."""
        return result.with_name(f"{result.name}.lines")

    def line(self, index: int, frequency: float) -> Line | None:
        """A finished line; None where it is not there or not whole (a disk that filled up, a machine that went off)."""
        arrays = self._read(f"line{index:06d}")
        line = None if arrays is None else _line(arrays)
        return line if line is not None and line.frequency == frequency else None

    def write_line(self, index: int, line: Line) -> None:
        """Keep a finished line; its adjoints are left out."""
        self._write(f"line{index:06d}", _line_arrays(line))

    def steps(self) -> Iterator[Step]:
        """The steps of a reduced model, in order, up to the first that is not there or not whole."""
        number = 0
        while (arrays := self._read(f"step{number:04d}")) is not None:
            try:
                row = arrays["check"]
                yield Step(int(row[5]), _line(arrays), arrays["columns"], Check.of(row))
            except _DAMAGED:
                return
            number += 1

    def write_step(self, number: int, step: Step) -> None:
        """Keep one step of a reduced model."""
        check = np.array([*(float(v) for v in asdict(step.check).values()), step.index])
        self._write(f"step{number:04d}", {**_line_arrays(step.line), "columns": step.columns, "check": check})

    def forget(self) -> None:
        """Remove the folder, once what it holds is safe elsewhere."""
        shutil.rmtree(self.folder, ignore_errors=True)

    def _read(self, name: str) -> dict[str, Any] | None:
        try:
            with (self.folder / f"{name}.npz").open("rb") as stream, np.load(stream) as held:
                return {key: held[key] for key in held.files}
        except _DAMAGED:
            return None

    def _write(self, name: str, arrays: Arrays) -> None:
        part = self.folder / f"{name}.part"
        with part.open("wb") as stream:
            np.savez(stream, **arrays)  # type: ignore[arg-type]
        part.replace(self.folder / f"{name}.npz")


def _line_arrays(line: Line) -> Arrays:
    arrays: Arrays = {"head": np.array([line.frequency, line.residual])}
    for i, r in enumerate(line.responses):
        arrays |= {f"{i}c": r.contributions, f"{i}s": r.supplied, f"{i}a": r.absorbed, f"{i}r": np.array([r.closure])}
        arrays |= {f"{i}{key}": part for key, part in (("f", r.field), ("m", r.mesh_error), ("w", r.radiated)) if part.size}
    return arrays


def _line(arrays: dict[str, Any]) -> Line:
    count = sum(1 for key in arrays if key.endswith("c") and key[:-1].isdigit())
    responses = []
    for i in range(count):
        head = arrays[f"{i}c"], arrays[f"{i}s"], arrays[f"{i}a"], float(arrays[f"{i}r"][0])
        responses.append(
            Response(*head, arrays.get(f"{i}f", EMPTY), arrays.get(f"{i}m", EMPTY), arrays.get(f"{i}w", NO_FORM), EMPTY)
        )
    f, worst = (float(v) for v in arrays["head"])
    return Line(f, tuple(responses), worst, EMPTY)


def light(line: Line, *, keep_field: bool) -> Line:
    """The line without its adjoints and, unless it is to be kept, without its fields."""
    responses = tuple(replace(r, field=r.field if keep_field else EMPTY, alone=EMPTY) for r in line.responses)
    return replace(line, responses=responses, adjoints=EMPTY)
