"""One frequency of a sweep, on the unknowns of the mesh or on those of a reduced model alike.

    A^T z_r = e_r                   adjoint of receiver sample r
    p_{r,l} = z_r^T f_l             contribution of load l; they add up to p_r
    A x = sum_l f_l g_l             field of the load case, for power, maps and a check of the contributions

One factorisation serves every load case and every receiver.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.linalg

from murmesh.solver.linalg import Analysis, Factor, analyse, solve_refined
from murmesh.solver.power import absorbed_power, input_power, power_labels, radiated_forms, radiated_labels
from murmesh.solver.system import LoadSet, Pattern, System, Values, dense

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
EMPTY: Complex = np.zeros((0, 0), dtype=np.complex128)
EMPTY.setflags(write=False)
NO_FORM: Complex = np.zeros((0, 0, 0), dtype=np.complex128)
NO_FORM.setflags(write=False)


@dataclass(frozen=True, eq=False)
class Response:
    """One load case at one line.

    contributions (samples, loads) [Pa]; supplied (loads,) and absorbed (labels,) [W]; closure: the field against the sum
    of the contributions at the receivers; field (n, r): r solutions whose mean squares add; mesh_error (samples, r) [Pa]:
    what the next order would add (see `accuracy`), empty where it was not asked for; radiated (surfaces, loads, loads) [W]:
    the form of the radiated power (see `power`), alone (n, loads): the fields behind it; both empty where nothing radiates.
    """

    contributions: Complex
    supplied: Floats
    absorbed: Floats
    closure: float
    field: Complex
    mesh_error: Complex
    radiated: Complex
    alone: Complex


@dataclass(frozen=True, eq=False)
class Line:
    """One solved frequency; adjoints (n, samples) vanish on the prescribed unknowns."""

    frequency: float
    responses: tuple[Response, ...]
    residual: float
    adjoints: Complex


@dataclass(frozen=True, eq=False)
class Engine:
    """What every line needs, computed once.  `analysis` is None for the dense matrices of a reduced model.

    apart: the load cases whose loads are solved one by one, because they radiate: each one's own power needs its field.
    """

    system: System
    analysis: Analysis | None
    free: npt.NDArray[np.bool_]
    outputs: Complex
    labels: tuple[str, ...]
    apart: tuple[bool, ...]

    @classmethod
    def of(cls, system: System, solver: str = "default") -> Engine:
        form = system.form
        analysis = analyse(form.core, solver, symmetric=system.symmetric) if isinstance(form, Pattern) else None
        outputs = np.asarray(dense(system.receivers).T[~system.fixed], dtype=np.complex128)
        labels = power_labels(system)
        apart = tuple(bool(radiated_labels(labels)) and not held.from_outside for held in system.load_sets)
        return cls(system, analysis, ~system.fixed, outputs, labels, apart)

    @property
    def solver(self) -> str:
        """What the linear solver is called in a result's provenance."""
        return "dense LU" if self.analysis is None else self.analysis.name

    def inner(self, matrix: Any) -> Any:
        """The rows and columns of the free unknowns."""
        return matrix if self.free.all() else matrix[self.free][:, self.free]

    def factor(self, matrix: Any) -> Factor:
        """Factorise the free part of A."""
        form = self.system.form
        if self.analysis is None or not isinstance(form, Pattern):
            return DenseFactor(scipy.linalg.lu_factor(self.inner(matrix)))
        return self.analysis.factor(matrix.data[form.core_slots])

    def line(self, values: Values) -> Line:
        """Solve one frequency for all load cases and receivers."""
        return self.solved(values)[0]

    def solved(self, values: Values) -> tuple[Line, Factor]:
        """The line, and the factorisation for those who go on with it."""
        matrix = self.system.matrix(values.phi)
        factor = self.factor(matrix)
        drives = [
            Drive.of(loads, matrix, psi, mix)
            for loads, psi, mix in zip(self.system.load_sets, values.psi, values.mix, strict=True)
        ]
        outputs = values.heard(self.outputs.T).T
        adjoint, fields, residual = self._solve(factor, self.inner(matrix), drives, outputs)
        responses = [
            self._respond(i, drive, matrix, adjoint, field, values)
            for i, (drive, field) in enumerate(zip(drives, fields, strict=True))
        ]
        adjoints = np.zeros((self.system.size, adjoint.shape[1]), dtype=np.complex128)
        adjoints[self.free] = adjoint
        return Line(values.frequency, tuple(responses), residual, adjoints), factor

    def _solve(
        self, factor: Factor, inner: Any, drives: list[Drive], outputs: Complex
    ) -> tuple[Complex, list[Complex], float]:
        """Adjoints, the field of each load case (or of its loads), and the worst residual: one block of right-hand sides if
        A = A^T."""
        forward = [
            drive.inside[self.free] if apart else drive.inside[self.free] @ drive.mix
            for drive, apart in zip(drives, self.apart, strict=True)
        ]
        if self.system.symmetric:
            solved, residual = solve_refined(factor, inner, np.hstack([outputs, *forward]))
            adjoint, *fields = _split(solved, [outputs, *forward])
            return adjoint, fields, residual
        adjoint, first = solve_refined(factor, inner, outputs, transpose=True)
        if not forward:
            return adjoint, [], first
        solved, second = solve_refined(factor, inner, np.hstack(forward))
        return adjoint, _split(solved, forward), max(first, second)

    def _respond(
        self, number: int, drive: Drive, matrix: Any, adjoint: Complex, solution: Complex, values: Values
    ) -> Response:
        system, free = self.system, self.free
        contributions = adjoint.T @ drive.inside[free] + values.heard(system.receivers @ drive.given)
        alone, form = EMPTY, NO_FORM
        if self.apart[number]:
            alone = np.array(drive.given, dtype=np.complex128)
            alone[free] += solution
            field = alone @ drive.mix
            form = radiated_forms(system, values.phi, values.frequency, alone)
        else:
            field = drive.given @ drive.mix
            field[free] += solution
        closure = _relative(values.heard(system.receivers @ field), contributions @ drive.mix)
        if values.direct:
            contributions = contributions + values.direct[number]
        reaction = None if free.all() else matrix @ field - drive.forces @ drive.mix
        f = values.frequency
        supplied = input_power(f, drive.forces, drive.given, reaction, field, drive.mix)
        absorbed = absorbed_power(system, values.phi, f, field, self.labels)
        return Response(contributions, supplied, absorbed, closure, field, EMPTY, form, alone)


@dataclass(frozen=True, eq=False)
class Drive:
    """One load case at one frequency: forces and prescribed pressures (n, loads), what they leave on the right-hand side
    of the free unknowns, and the columns `mix` (loads, r) whose mean squares add up to the field's."""

    forces: Complex
    given: Complex
    inside: Complex
    mix: Complex

    @classmethod
    def of(cls, loads: LoadSet, matrix: Any, psi: tuple[Complex, ...], mix: Complex) -> Drive:
        forces, given = loads.vectors(psi)
        return cls(forces, given, forces - matrix @ given if np.any(given) else forces, mix)


@dataclass(frozen=True)
class DenseFactor:
    """LU of a dense matrix."""

    lu: Any

    def solve(self, b: Complex) -> Complex:
        return np.asarray(scipy.linalg.lu_solve(self.lu, b))

    def solve_transpose(self, b: Complex) -> Complex:
        return np.asarray(scipy.linalg.lu_solve(self.lu, b, trans=1))


def _split(solved: Complex, columns: list[Complex]) -> list[Complex]:
    return np.split(solved, np.cumsum([block.shape[1] for block in columns[:-1]]), axis=1)


def _relative(direct: npt.NDArray[Any], summed: npt.NDArray[Any]) -> float:
    scale = float(np.abs(direct).max(initial=0.0))
    return float(np.abs(direct - summed).max(initial=0.0)) / scale if scale > 0 else 0.0
