"""A frequency sweep: one factorisation per line serves every load case and every receiver's adjoint.

    A z_r = e_r                     adjoint of receiver r (A is symmetric)
    p_{r,l} = z_r^T f_l             contribution of load l; they add up to p_r
    A x = sum_l f_l g_l             field of the load case, for power, maps and a check of the contributions

Every finished line is kept in a journal beside the result, so that an interrupted sweep goes on where it stopped.
"""

from __future__ import annotations

import hashlib
import shutil
import time
import warnings
import zipfile
from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from murmesh.solver.case.model import Case
from murmesh.solver.errors import ResultError, ValidityWarning
from murmesh.solver.linalg import Analysis, analyse, solve_refined
from murmesh.solver.power import absorbed_power, input_power, power_labels
from murmesh.solver.receiver_points import Samples, locate_receivers
from murmesh.solver.result import Line, Response, Result
from murmesh.solver.space import discretise
from murmesh.solver.system import LoadSet, System, build_system

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]


@dataclass(frozen=True)
class Progress:
    """How far a sweep is: lines done of all lines, how many came from the journal, seconds left at the present pace."""

    done: int
    total: int
    resumed: int
    frequency: float
    seconds_left: float


Report = Callable[[Progress], None]


def solve(
    case: Case,
    journal: Path | None = None,
    *,
    report: Report | None = None,
    order: int = 0,
    solver: str = "default",
) -> Result:
    """Solve `case` on every line of its sweep.

    `journal` is a folder for finished lines; it is read first, and removed by `forget` once the result is safe.
    Raises CaseError, MeshError or SolveError; an interrupt leaves the journal as it is.
    """
    space = discretise(case, order)
    samples = locate_receivers(case, space.geometry)
    system = build_system(space, samples)
    _check_ranges(system)
    book = Journal.open(journal, case, space.order, system.size) if journal else None
    engine = _Engine.of(system, solver)
    lines = _run(engine, case.sweep.frequencies, book, report)
    return _collect(case, engine, samples, lines)


@dataclass(frozen=True)
class Journal:
    """A folder with one file per finished line, each written beside and renamed."""

    folder: Path

    @classmethod
    def open(cls, folder: Path, case: Case, order: int, size: int) -> Journal:
        """Open or make the folder; ResultError if it belongs to another case, or is a file."""
        folder = Path(folder)
        if folder.is_file():
            raise ResultError(f"'{folder}' is a file, but finished lines need a folder of their own; remove or rename it")
        key = hashlib.sha256(f"{case.checksum} order {order} size {size}".encode()).hexdigest()
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

    def _path(self, index: int) -> Path:
        return self.folder / f"line{index:06d}.npz"

    def read(self, index: int, frequency: float) -> Line | None:
        """A finished line; None where it is not there or not whole (a disk that filled up, a machine that went off)."""
        try:
            line = Line.load(self._path(index))
        except (OSError, EOFError, ValueError, KeyError, zipfile.BadZipFile):
            return None
        return line if line.frequency == frequency else None

    def write(self, index: int, line: Line) -> None:
        part = self._path(index).with_suffix(".part")
        with part.open("wb") as stream:
            line.save(stream)
        part.replace(self._path(index))

    def forget(self) -> None:
        """Remove the folder, once what it holds is safe elsewhere."""
        shutil.rmtree(self.folder, ignore_errors=True)


@dataclass(frozen=True, eq=False)
class _Engine:
    """What every line needs, computed once."""

    system: System
    analysis: Analysis
    phi: Complex
    free: npt.NDArray[np.bool_]
    outputs: Complex
    labels: tuple[str, ...]

    @classmethod
    def of(cls, system: System, solver: str) -> _Engine:
        phi = system.coefficients(system.space.case.sweep.frequencies)
        analysis = analyse(system.pattern.lower, solver)
        outputs = system.receivers.T.tocsr()[~system.fixed].toarray().astype(np.complex128)
        return cls(system, analysis, phi, ~system.fixed, outputs, power_labels(system))

    def line(self, index: int, f: float) -> Line:
        """Solve one frequency for all load cases and receivers: one factorisation, one block of right-hand sides."""
        system, free = self.system, self.free
        matrix = system.matrix(self.phi[index])
        factor = self.analysis.factor(matrix.data[system.pattern.lower_slots])
        drives = [_Drive.of(system, loads, matrix, f) for loads in system.load_sets]
        columns = [self.outputs, *(drive.inside[free] @ drive.mix for drive in drives)]
        inner = matrix if free.all() else matrix[free][:, free]
        solved, residual = solve_refined(factor, inner, np.hstack(columns))
        adjoint, *fields = np.split(solved, np.cumsum([block.shape[1] for block in columns[:-1]]), axis=1)
        responses = [
            self._respond(drive, matrix, adjoint, field, self.phi[index], f)
            for drive, field in zip(drives, fields, strict=True)
        ]
        return Line(f, tuple(responses), residual)

    def _respond(
        self, drive: _Drive, matrix: sp.csr_matrix, adjoint: Complex, solution: Complex, phi: Complex, f: float
    ) -> Response:
        system, free = self.system, self.free
        contributions = adjoint.T @ drive.inside[free] + system.receivers @ drive.given
        field = drive.given @ drive.mix
        field[free] += solution
        closure = _relative(system.receivers @ field, contributions @ drive.mix)
        reaction = None if free.all() else matrix @ field - drive.forces @ drive.mix
        supplied = input_power(f, drive.forces, drive.given, reaction, field, drive.mix)
        taken = absorbed_power(system, phi, f, field, self.labels)
        kept = field if np.any(np.isclose(f, system.space.case.sweep.field_frequencies, rtol=1e-9)) else None
        return Response(contributions, supplied, taken, closure, kept)


@dataclass(frozen=True, eq=False)
class _Drive:
    """One load case at one frequency: forces and prescribed pressures (n, loads), what they leave on the right-hand side
    of the free unknowns, and the columns `mix` (loads, r) whose mean squares add up to the field's."""

    forces: Complex
    given: Complex
    inside: Complex
    mix: Complex

    @classmethod
    def of(cls, system: System, loads: LoadSet, matrix: sp.csr_matrix, f: float) -> _Drive:
        forces, given = loads.vectors(f)
        inside = forces - matrix @ given if np.any(given) else forces
        rule = system.space.case.load_case(loads.name).combination
        return cls(forces, given, inside, rule.factors(np.array([f]), len(loads.loads))[0])


def _relative(direct: npt.NDArray[Any], summed: npt.NDArray[Any]) -> float:
    scale = float(np.abs(direct).max(initial=0.0))
    return float(np.abs(direct - summed).max(initial=0.0)) / scale if scale > 0 else 0.0


def _check_ranges(system: System) -> None:
    """Ask every coefficient for every line before the first factorisation: a table that ends too early ends here."""
    frequencies = system.space.case.sweep.frequencies
    _warn_of_active_terms(system, system.coefficients(frequencies))
    for loads in system.load_sets:
        for term in loads.terms:
            term.psi(frequencies)
        system.space.case.load_case(loads.name).combination.factors(frequencies, len(loads.loads))


def _warn_of_active_terms(system: System, phi: Complex) -> None:
    """A term takes the power Im(phi) p^H A p / (2 w), so a negative imaginary part creates sound."""
    frequencies = system.space.case.sweep.frequencies
    for j, term in enumerate(system.terms):
        active = frequencies[phi[:, j].imag < -1e-9 * np.abs(phi[:, j])]
        if len(active):
            warnings.warn(
                f"{term.label}: its law creates sound from {active[0]:g} to {active[-1]:g} Hz (for a wall, Re Z < 0); "
                "it is used outside its range, or a sign in its data is wrong",
                ValidityWarning,
                stacklevel=4,
            )


def _run(engine: _Engine, frequencies: Floats, book: Journal | None, report: Report | None) -> list[Line]:
    lines: list[Line] = []
    resumed, started = 0, time.monotonic()
    for index, f in enumerate(frequencies):
        line = book.read(index, float(f)) if book else None
        if line is not None:
            resumed += 1
        else:
            line = engine.line(index, float(f))
            if book:
                book.write(index, line)
        lines.append(line)
        if report:
            solved = index + 1 - resumed
            pace = (time.monotonic() - started) / solved if solved else 0.0
            report(Progress(index + 1, len(frequencies), resumed, float(f), pace * (len(frequencies) - index - 1)))
    return lines


def _collect(case: Case, engine: _Engine, samples: Samples, lines: list[Line]) -> Result:
    provenance = {
        "case_checksum": case.checksum,
        "order": str(engine.system.space.order),
        "unknowns": str(engine.system.size),
        "linear_solver": engine.analysis.name,
        "solved": datetime.now(UTC).isoformat(timespec="seconds"),
        **{name: _version(name) for name in ("murmesh", "numpy", "scipy", "h5py", "rslab")},
    }
    return Result.of(case, engine.system.space.order, samples, engine.labels, lines, provenance)


def _version(package: str) -> str:
    try:
        return version(package)
    except PackageNotFoundError:
        return "not installed"
