"""How far the mesh is off: the dual-weighted residual in the next order.

    eta_r = z_r^T (f - A p_h)      over the space of the next order, z_r its adjoint of receiver r

p_h + eta is the solution of the next order at the receiver, so 20 lg(1 + |eta| / |p_h|) is the error bar of a level. The
residual of p_h vanishes on the functions p_h is made of (Galerkin), and the new functions of the hierarchic basis follow
the old ones almost independently of each other, so that for every line

    eta_r ~ kappa * sum_i r_z,i r_p,i / D_i,   r_p = (f - A p_h)_new,   r_z = (e_r - A^T z_h)_new,   D = diag |A|_new

costs no solve. kappa is the true eta of the next order against that sum, from `CALIBRATION_LINES` lines solved in the next
order and interpolated between them; those lines have the true eta. (Dual-weighted residuals: R. Becker and R. Rannacher,
Acta Numerica 10 (2001) 1; cited from memory. The diagonal form with kappa: fitted here, kappa is 1.8 to 2.7 on the
demonstration.)
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import partial
from typing import Any

import numpy as np
import numpy.typing as npt

from murmesh.solver.assembly import DofMap
from murmesh.solver.case.model import HIGHEST_ORDER
from murmesh.solver.engine import Engine, Line, Response
from murmesh.solver.receiver_points import Samples
from murmesh.solver.space import Space
from murmesh.solver.system import LoadSet, Matrix, System, Values, build_system

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
Ints = npt.NDArray[np.int64]

CALIBRATION_LINES = (0.2, 0.55, 0.9)
"""Where in the list of lines the next order is solved in full."""
UNCALIBRATED = 3.0
"""kappa where the next order cannot be solved, on the large side of what calibrations gave."""
DB = 20 / np.log(10)


def next_order(space: Space) -> Space:
    """The space of the same mesh with every element one order higher, up to the highest there is."""
    dofs = DofMap.build(space.topology, np.minimum(space.dofs.orders + 1, HIGHEST_ORDER))
    return replace(space, order=dofs.max_order, dofs=dofs)


@dataclass(frozen=True, eq=False)
class Block:
    """Those rows of a matrix that are not empty: most terms know a part of the added functions only."""

    rows: Ints
    values: Matrix

    @classmethod
    def of(cls, matrix: Matrix) -> Block:
        rows = np.flatnonzero(np.diff(matrix.indptr))
        return cls(rows, matrix[rows])

    def on(self, basis: npt.NDArray[np.floating[Any]]) -> Block:
        """Columns in the coordinates of a reduced basis (n, K), dense, in single precision."""
        return Block(self.rows, np.asarray(self.values @ basis, dtype=np.float32))


@dataclass(frozen=True, eq=False)
class MeshError:
    """Residuals on the functions that the next order adds to a space.

    finer              the sum of terms in the next order
    old, new           where the unknowns of the space, and the added ones, stand in it
    right, left        per term: rows of A_j (of A_j^T) of the added functions, columns of the space or of a reduced basis
    diagonal           (terms, new) diagonals of the A_j
    load_sets, receivers  the loads' and receivers' rows of the added functions
    """

    finer: System
    old: Ints
    new: Ints
    right: tuple[Block, ...]
    left: tuple[Block, ...]
    diagonal: Floats
    load_sets: tuple[LoadSet, ...]
    receivers: Floats

    @classmethod
    def of(cls, system: System, samples: Samples) -> MeshError:
        """For the lines of `system`."""
        finer = build_system(next_order(system.space), samples)
        old = _places(system, finer)
        new = np.setdiff1d(np.flatnonzero(~finer.fixed), old)
        right = tuple(Block.of(term.matrix[new][:, old]) for term in finer.terms)
        left = right if finer.symmetric else tuple(Block.of(term.matrix.T.tocsr()[new][:, old]) for term in finer.terms)
        diagonal = np.stack([np.abs(term.matrix.diagonal()[new]) for term in finer.terms])
        receivers = finer.receivers.T.tocsr()[new].toarray()
        return cls(finer, old, new, right, left, diagonal, _rows(finer, new), receivers)

    def on(self, basis: npt.NDArray[np.floating[Any]]) -> MeshError:
        """The same for lines in the coordinates of a reduced basis (n, K), in single precision: a bar needs no more."""
        right = tuple(block.on(basis) for block in self.right)
        left = right if self.left is self.right else tuple(block.on(basis) for block in self.left)
        return replace(self, right=right, left=left)

    def judged(self, values: Values, line: Line) -> Line:
        """The line with the sum of the docstring (kappa left out) as the `mesh_error` of its responses."""
        weight = 1.0 / np.maximum(np.abs(values.phi) @ self.diagonal, 1e-300)
        size = len(self.new)
        z = (values.heard(self.receivers.T).T - _combined(self.left, values.phi, line.adjoints, size)) * weight[:, None]
        responses = []
        for number, response in enumerate(line.responses):
            forces = self.load_sets[number].vectors(values.psi[number])[0] @ values.mix[number]
            residual = forces - _combined(self.right, values.phi, response.field, size)
            responses.append(replace(response, mesh_error=z.T @ residual))
        return replace(line, responses=tuple(responses))


def _places(system: System, finer: System) -> Ints:
    """Where the unknowns of a system stand in that of the next order."""
    selection = finer.space.dofs.selection_of(system.space.dofs)
    parts = [selection]
    for low, high in zip(system.space.envelopes, finer.space.envelopes, strict=True):
        at = np.searchsorted(high.envelope.trace, selection[low.envelope.trace])
        parts.append(high.envelope.numbers[at, 1:].ravel())
    return np.concatenate(parts)


def _rows(system: System, new: Ints) -> tuple[LoadSet, ...]:
    """The loads' rows of some unknowns; prescribed pressures have none among them."""
    return tuple(
        replace(held, terms=tuple(replace(t, build=partial(_taken, t.vectors, new), fixes=False) for t in held.terms))
        for held in system.load_sets
    )


def _taken(vectors: Matrix, rows: Ints) -> Matrix:
    return vectors[rows]


def _combined(blocks: tuple[Block, ...], phi: Complex, x: Complex, size: int) -> Complex:
    """sum_j phi_j A_j x (size, m), real and imaginary part of x apart: the blocks are real."""
    columns = np.hstack([x.real, x.imag])
    if isinstance(blocks[0].values, np.ndarray):
        columns = columns.astype(np.float32)
    half = x.shape[1]
    total = np.zeros((size, half), dtype=np.complex128)
    for coefficient, block in zip(phi, blocks, strict=True):
        product = block.values @ columns
        total[block.rows] += coefficient * (product[:, :half] + 1j * product[:, half:])
    return total


# ---------------------------------------------------------------------------------------------------------------------
# calibration


def calibration_lines(lines: int) -> tuple[int, ...]:
    """Indices of the lines that are solved in the next order."""
    return tuple(dict.fromkeys(round(part * (lines - 1)) for part in CALIBRATION_LINES))


def true_errors(finer: Engine, samples_of: Line, values: Values) -> tuple[Complex, ...]:
    """eta (samples, r) of every load case at one line, by solving it in the next order."""
    found = finer.line(values)
    return tuple(
        (b.contributions - a.contributions) @ mix
        for a, b, mix in zip(samples_of.responses, found.responses, values.mix, strict=True)
    )


def kappa(estimated: tuple[Complex, ...], true: tuple[Complex, ...]) -> float:
    """The real factor that fits the estimates to the true errors best; `UNCALIBRATED` where both vanish."""
    e, t = (np.concatenate([part.ravel() for part in parts]) for parts in (estimated, true))
    size = float(np.vdot(e, e).real)
    return float(np.vdot(e, t).real) / size if size > 0 else UNCALIBRATED


def scaled(lines: list[Line], factors: dict[int, float], exact: dict[int, tuple[Complex, ...]]) -> list[Line]:
    """Lines whose mesh errors are kappa times the estimate, kappa interpolated over the lines; true ones where known."""
    if not factors:
        factor = np.full(len(lines), UNCALIBRATED)
    else:
        known = sorted(factors)
        factor = np.interp(np.arange(len(lines)), known, [factors[i] for i in known])
    return [
        _with_errors(line, exact.get(i) or tuple(factor[i] * r.mesh_error for r in line.responses))
        for i, line in enumerate(lines)
    ]


def _with_errors(line: Line, errors: tuple[Complex, ...]) -> Line:
    responses: tuple[Response, ...] = tuple(
        replace(response, mesh_error=error) for response, error in zip(line.responses, errors, strict=True)
    )
    return replace(line, responses=responses)
