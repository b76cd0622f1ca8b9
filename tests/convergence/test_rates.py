"""Rates: the published one-dimensional dispersion, and eigenvalues that converge with h^(2p) for every order.

Sources: header of G01 in tests/references (Ihlenburg & Babuska, SINUM 34 (1997) 315; Ainsworth, SINUM 42 (2004) 553);
I. Babuska and J. Osborn, Eigenvalue problems, Handbook of Numerical Analysis II (1991), section 8 for the rate.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
import scipy.sparse.linalg as spla
from numpy.polynomial import Legendre

from meshes import ball, box, shuffled
from murmesh.solver.assembly import DofMap, Geometry, evaluate, volume_matrices
from murmesh.solver.elements.quadrature import tetrahedron_rule
from murmesh.solver.topology import Topology
from reading import read_csv_reference


@cache
def _one_cell(order: int) -> tuple[np.ndarray, np.ndarray]:
    """K and M of functions of x alone (1-x, x, bubbles) on a unit cell of six tetrahedra."""
    mesh = shuffled(box(1, 1, 1))
    geometry, dofmap = Geometry(mesh.nodes, mesh.tets), DofMap.build(Topology.build(mesh.tets), order)
    points, weights = tetrahedron_rule(2 * order)
    tet, bary = np.repeat(np.arange(6), len(points)), np.tile(points, (6, 1))
    x = geometry.map(tet, bary)[:, 0]
    bubbles = [x * (1 - x) * Legendre.basis(n, [0, 1])(x) for n in range(order - 1)]
    K, M = volume_matrices(geometry, dofmap)
    load = evaluate(geometry, dofmap, tet, bary).T @ (np.tile(weights, 6)[:, None] * np.column_stack([1 - x, x, *bubbles]))
    V = spla.splu(M.tocsc()).solve(load)
    return V.T @ K @ V, V.T @ M @ V


def _wavenumber_error(order: int, kh: float) -> float:
    """(k_h - k)/k from the condensed cell, cos(k_h h) = -A_11/A_12."""
    K, M = _one_cell(order)
    A = K - kh**2 * M
    if order > 1:
        A = A[:2, :2] - A[:2, 2:] @ np.linalg.solve(A[2:, 2:], A[2:, :2])
    turns = np.round(kh / np.pi)
    principal = np.arccos(np.clip(-A[0, 0] / A[0, 1], -1, 1))
    candidates = np.array([2 * np.pi * n + s * principal for n in range(int(turns) + 2) for s in (1, -1)])
    return float(candidates[np.argmin(abs(candidates - kh))] / kh - 1)


@pytest.mark.parametrize("order", range(1, 9))
def test_dispersion_g01(order) -> None:
    table = read_csv_reference("G01_dispersion_p_fem_1d.csv")
    error = np.array([float(v) if str(v) not in ("None", "") else np.nan for v in table["rel_wavenumber_error_exact"]])
    turns = table["kh"] / np.pi
    # cos(k_h h) near +-1 halves the digits that double precision leaves of an error
    visible = abs(error) > np.where(np.isclose(turns, np.round(turns)), 1e-5, 1e-10)
    rows = np.flatnonzero((table["p"] == order) & np.isfinite(error) & visible)
    assert len(rows) >= 5
    for row in rows:
        kh, exact = table["kh"][row], error[row]
        found = _wavenumber_error(order, kh)
        if np.isclose(kh / np.pi, np.round(kh / np.pi)):  # at the edge of a stopping band both signs are solutions
            found, exact = abs(found), abs(exact)
        assert found == pytest.approx(exact, rel=1e-2, abs=1e-12)


@pytest.mark.parametrize("order", range(1, 9))
def test_unknowns_per_wavelength_g02(order) -> None:
    """With D = 2 pi p / (k h) unknowns per wavelength the error is the one the column is for; with fewer it is larger."""
    table = read_csv_reference("G02_dofs_per_wavelength.csv")
    row = int(np.flatnonzero(table["p"] == order)[0])
    for column, allowed in (("D_1pc", 1e-2), ("D_0.1pc", 1e-3), ("D_0.01pc", 1e-4)):
        kh = 2 * np.pi * order / table[column][row]
        assert abs(_wavenumber_error(order, kh * 0.999)) <= allowed * 1.001
        if abs(kh / np.pi - np.round(kh / np.pi)) < 0.02:
            continue  # a stopping band begins here, so that no error can be read beyond
        worse = [abs(_wavenumber_error(order, kh * factor)) for factor in (1.002, 1.01, 1.03)]
        assert max(worse) > allowed


def _duct_error(order: int, cells: int, waves: int) -> float:
    """(k_h^2 - k^2)/k^2 of the mode cos(m pi x) in a thin rigid duct."""
    mesh = shuffled(box(cells, 1, 1, (1.0, 0.05, 0.05)))
    geometry, dofmap = Geometry(mesh.nodes, mesh.tets), DofMap.build(Topology.build(mesh.tets), order)
    K, M = volume_matrices(geometry, dofmap)
    exact = (waves * np.pi) ** 2
    # from below, so that the nearest eigenvalue is this mode's, which lies above the exact one
    value = spla.eigsh(K.tocsc(), 1, M.tocsc(), sigma=exact * (1 - 1e-7), v0=np.arange(1.0, dofmap.n_dofs + 1))[0][0]
    return float(value / exact - 1)


# half waves along the duct and the two numbers of cells: asymptotic, above rounding, and k h no multiple of pi, where
# the error of even the line is exceptionally small
CASES = {
    1: (1, 8, 16),
    2: (2, 7, 11),
    3: (3, 5, 8),
    4: (3, 4, 7),
    5: (5, 4, 7),
    6: (5, 4, 7),
    7: (7, 5, 8),
    8: (7, 4, 6),
}


@pytest.mark.parametrize("order", range(1, 9))
def test_eigenvalues_converge_with_twice_the_order(order) -> None:
    waves, coarse, fine = CASES[order]
    errors = [_duct_error(order, cells, waves) for cells in (coarse, fine)]
    assert errors[0] > errors[1] > 0  # from above: Rayleigh's principle
    rate = np.log(errors[0] / errors[1]) / np.log(fine / coarse)
    assert rate == pytest.approx(2 * order, rel=0.07)


@pytest.mark.parametrize("order", range(1, 9))
def test_tetrahedra_are_no_worse_than_the_line(order) -> None:
    """Functions of x alone lie in the space: the eigenvalue is at most that of the one-dimensional elements."""
    waves, coarse, _ = CASES[order]
    line = -2 * _wavenumber_error(order, waves * np.pi / coarse)
    assert 0.5 * line < _duct_error(order, coarse, waves) < 1.01 * line


def test_a_curved_wall_limits_no_order_below_four() -> None:
    """First mode of a rigid sphere, ka = 2.0815759778 (A10): the error with quadratic walls falls at least like h^4."""
    errors = []
    for n in (1, 2):
        mesh = ball(n, 1.0)
        geometry, dofmap = Geometry(mesh.nodes, mesh.tets), DofMap.build(Topology.build(mesh.tets), 4)
        K, M = volume_matrices(geometry, dofmap)
        value = np.sort(spla.eigsh(K.tocsc(), 3, M.tocsc(), sigma=4.0, v0=np.arange(1.0, dofmap.n_dofs + 1))[0])
        assert np.ptp(value) < 1e-3 * value[0]
        errors.append(abs(np.sqrt(value.mean()) / 2.0815759778 - 1))
    assert np.log2(errors[0] / errors[1]) > 3.3
