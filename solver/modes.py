"""Cavity modes of the undamped interior.

    K phi = w^2 M phi,   K = sum_r K_r / rho_r,   M = sum_r M_r / (rho_r c_r^2)

Walls are hard, losses are left out, media take the real part of their values at the frequency looked at; surfaces of
kind `pressure` keep p = 0. Shapes are normalised to a largest value of 1 at the vertices, edge middles and centres of
the elements (a coarse mesh may have all its vertices on a shape's nodes).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
import scipy.sparse.linalg as spla

from murmesh.solver.assembly import evaluate, volume_matrices
from murmesh.solver.case.model import Case
from murmesh.solver.errors import CaseError
from murmesh.solver.linalg import analyse
from murmesh.solver.space import Space, discretise
from murmesh.solver.system import pressure_fixed

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Modes:
    """Frequencies (m,) [Hz] and shapes (unknowns, m) on `space`."""

    space: Space
    frequencies: Floats
    shapes: Floats


def modes(case: Case, count: int, near: float = 0.0, order: int = 0) -> Modes:
    """The `count` modes nearest to the frequency `near` [Hz], in rising order."""
    space = discretise(case, order)
    stiffness, mass = _matrices(space, near or float(case.sweep.frequencies[-1]))
    free = np.flatnonzero(~pressure_fixed(space))
    inner = [matrix[free][:, free].tocsc() for matrix in (stiffness, mass)]
    if not 0 < count < len(free) - 1:
        raise CaseError(f"{count} modes are asked of {len(free)} unknowns; ask for 1 .. {len(free) - 2}")
    values, vectors = _nearest(inner[0], inner[1], count, near)
    shapes = np.zeros((space.dofs.n_dofs, count))
    shapes[free] = vectors
    return Modes(space, _hertz(values), shapes / peaks(space, shapes))


def _hertz(values: Floats) -> Floats:
    return np.asarray(np.sqrt(np.maximum(values, 0.0)) / (2 * np.pi))


def peaks(space: Space, shapes: npt.NDArray[np.inexact]) -> Floats:
    """Largest |p| of every shape at the vertices, edge middles and centres of the elements, (m,)."""
    corners = np.eye(4)
    middles = [(corners[a] + corners[b]) / 2 for a in range(4) for b in range(a)]
    places = np.vstack([*middles, corners.mean(axis=0)])
    tets = np.arange(len(space.geometry.tets))
    peaks = np.abs(shapes[: space.topology.n_vertices]).max(axis=0)
    for place in places:
        rows = evaluate(space.geometry, space.dofs, tets, np.tile(place, (len(tets), 1)))
        peaks = np.maximum(peaks, np.abs(np.asarray(rows @ shapes)).max(axis=0))
    return np.asarray(np.where(peaks > 0, peaks, 1.0))


def _matrices(space: Space, f: float) -> tuple[sp.csr_matrix, sp.csr_matrix]:
    stiffness: sp.csr_matrix = sp.csr_matrix((space.dofs.n_dofs, space.dofs.n_dofs))
    mass = stiffness.copy()
    for index, region in enumerate(space.case.regions):
        at = np.array([f])
        rho, c = float(region.medium.rho(at)[0].real), float(region.medium.c(at)[0].real)
        k, m = volume_matrices(space.geometry, space.dofs, np.flatnonzero(space.case.mesh.tet_region == index))
        stiffness, mass = stiffness + k / rho, mass + m / (rho * c**2)
    return stiffness, mass


def _nearest(stiffness: sp.csc_matrix, mass: sp.csc_matrix, count: int, near: float) -> tuple[Floats, Floats]:
    """Shift-invert Lanczos around w^2, a little beside it so that the shifted matrix is never singular.

    It finds what is nearest in w^2. What is nearest in frequency is among the modes up to near + its farthest distance,
    so more are found until they reach that far.
    """
    shift = (2 * np.pi * near) ** 2
    scale = stiffness.diagonal().sum() / mass.diagonal().sum()
    shift = shift * (1 + 1e-4) if shift > 0 else -1e-6 * scale
    lower = sp.tril(stiffness - shift * mass).tocsc()
    lower.sort_indices()
    factor = analyse(lower).factor(lower.data.astype(np.complex128))
    inverse = spla.LinearOperator(
        stiffness.shape, matvec=lambda b: factor.solve(b.reshape(-1, 1).astype(np.complex128)).real.ravel()
    )
    found = count
    while True:
        values, vectors = spla.eigsh(stiffness, found, mass, sigma=shift, OPinv=inverse, v0=np.ones(stiffness.shape[0]))
        away = np.abs(_hertz(values) - near)
        chosen = np.argsort(away, kind="stable")[:count]
        top = (2 * np.pi * (near + away[chosen[-1]])) ** 2
        if top - shift <= np.abs(values - shift).max() * (1 + 1e-9) or found == stiffness.shape[0] - 2:
            order = chosen[np.argsort(values[chosen])]
            return values[order], vectors[:, order]
        found = min(2 * found, stiffness.shape[0] - 2)
