"""Rigid cavities against published eigenfrequencies: every frequency below the cut, with its multiplicity.

Sources: headers of A01, A09, A10, A11 and A12 in tests/references; tolerances in TOLERANCES.csv there.
"""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse.linalg as spla

from meshes import TestMesh, ball, box, cylinder, grid, jiggled, prism, shuffled
from murmesh.solver.assembly import DofMap, Geometry, volume_matrices
from murmesh.solver.topology import Topology
from reading import read_csv_reference

C = 343.0


def _eigenfrequencies(mesh: TestMesh, orders, count: int, fluids=((1.0, C),), region=None) -> np.ndarray:
    """The lowest non-zero eigenfrequencies [Hz] of sum_r K_r / rho - w^2 M_r / (rho c^2)."""
    geometry, dofmap = Geometry(mesh.nodes, mesh.tets), DofMap.build(Topology.build(mesh.tets), orders)
    region = np.zeros(len(mesh.tets), dtype=int) if region is None else region
    K, M = 0.0, 0.0
    for number, (rho, c) in enumerate(fluids):
        k, m = volume_matrices(geometry, dofmap, np.flatnonzero(region == number))
        K, M = K + k / rho, M + m / (rho * c**2)
    # shifted below zero, K - sigma M is definite
    w2 = spla.eigsh(K.tocsc(), count + 1, M.tocsc(), sigma=-((2 * np.pi * 60.0) ** 2), v0=np.ones(dofmap.n_dofs))[0]
    found = np.sqrt(np.sort(np.maximum(w2, 0.0))) / (2 * np.pi)
    assert found[0] < 1e-2
    assert found[1] > 1.0
    return found[1:]


def _published(name: str, column: str, below: float) -> np.ndarray:
    """Ascending frequencies below the cut, repeated by their multiplicity."""
    table = read_csv_reference(name)
    repeat = table.get("multiplicity", np.ones(len(table[column]))).astype(int)
    every = np.sort(np.repeat(table[column], repeat))
    return every[every < below]


def _assert_matches(mesh: TestMesh, orders, expected: np.ndarray, tolerance: float, **fluids) -> None:
    """One to one in ascending order, one more to show that none is too many below the cut."""
    found = _eigenfrequencies(mesh, orders, len(expected) + 1, **fluids)
    np.testing.assert_allclose(found[: len(expected)], expected, rtol=tolerance)
    assert found[-1] > expected[-1] * (1 + 3 * tolerance)


@pytest.mark.parametrize(("order", "cells", "below"), [(3, (6, 4, 4), 240.0), (4, (4, 3, 3), 300.0), (6, (3, 2, 2), 400.0)])
def test_box_a01(order, cells, below) -> None:
    mesh = shuffled(jiggled(box(*cells, (1.9, 1.35, 1.1)), 0.05))
    _assert_matches(mesh, order, _published("A01_box_eigenfrequencies.csv", "f_Hz", below), 1e-4)


def test_box_with_an_order_per_element_a01() -> None:
    mesh = shuffled(jiggled(box(4, 3, 3, (1.9, 1.35, 1.1)), 0.05))
    orders = np.random.default_rng(0).integers(4, 8, len(mesh.tets))
    _assert_matches(mesh, orders, _published("A01_box_eigenfrequencies.csv", "f_Hz", 300.0), 1e-4)


def test_linear_elements_need_half_a_percent() -> None:
    mesh = box(14, 10, 8, (1.9, 1.35, 1.1))
    expected = _published("A01_box_eigenfrequencies.csv", "f_Hz", 130.0)
    _assert_matches(mesh, 1, expected, 5e-3)
    assert np.all(_eigenfrequencies(mesh, 1, len(expected)) > expected * (1 + 1e-4))


def test_cylinder_a09() -> None:
    expected = _published("A09_cylinder_eigenfrequencies.csv", "f_Hz", 760.0)
    _assert_matches(cylinder(2, 2), 5, expected, 1e-3)


def test_straight_facets_miss_the_cylinder() -> None:
    expected = _published("A09_cylinder_eigenfrequencies.csv", "f_Hz", 300.0)
    found = _eigenfrequencies(cylinder(2, 2, order=1), 5, len(expected))
    assert abs(found / expected - 1).max() > 1e-2


def test_sphere_a10() -> None:
    expected = _published("A10_sphere_eigenfrequencies.csv", "f_Hz_a0.5", 640.0)
    assert len(expected) == 3 + 5 + 1 + 7 + 9
    _assert_matches(ball(2), 4, expected, 1e-3)


def test_prism_a11() -> None:
    expected = _published("A11_equilateral_prism_eigenfrequencies.csv", "f_Hz", 700.0)
    _assert_matches(shuffled(prism(2, 1)), 7, expected, 1e-4)


def _two_fluid_mesh() -> tuple[TestMesh, np.ndarray]:
    mesh = grid([0, 0.55, 1.1, 1.4, 1.7], [0, 0.4, 0.8], [0, 0.5])
    return mesh, (mesh.centroids[:, 0] > 1.1).astype(int)


def test_two_fluids_a12() -> None:
    mesh, region = _two_fluid_mesh()
    expected = _published("A12_two_fluid_box_eigenfrequencies.csv", "f_Hz", 440.0)
    fluids = ((1.21, 343.0), (1.84, 268.0))
    _assert_matches(mesh, 5 + region, expected, 1e-4, fluids=fluids, region=region)


def test_two_fluids_without_the_density_are_wrong() -> None:
    mesh, region = _two_fluid_mesh()
    expected = _published("A12_two_fluid_box_eigenfrequencies.csv", "f_Hz", 200.0)
    found = _eigenfrequencies(mesh, 4, len(expected), fluids=((1.0, 343.0), (1.0, 268.0)), region=region)
    assert abs(found / expected - 1).max() > 1e-2
