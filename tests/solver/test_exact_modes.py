"""`modes` of a case against closed forms; the bare matrices are checked in tests/convergence.

Sources of the values: headers of A01, A10, A11 and A12 in tests/references.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from cases import case_of, monopole
from meshes import TestMesh, ball, box, grid, prism
from murmesh.solver.case.boundary import Boundary, Pressure
from murmesh.solver.case.medium import GivenFluid
from murmesh.solver.case.model import Case, Region
from murmesh.solver.errors import CaseError
from murmesh.solver.modes import modes
from reading import read_csv_reference


def _case(mesh: TestMesh, kinds: dict[str, Boundary] | None = None, order: int = 5, **more: Any) -> Case:
    inside = tuple(float(x) for x in mesh.centroids[0])
    return case_of(mesh, kinds or {}, [monopole(inside)], [100.0], {"r": inside}, order=order, **more)  # type: ignore[arg-type]


def _expand(name: str, count: int, column: str = "f_Hz") -> np.ndarray:
    table = read_csv_reference(name)
    times = table["multiplicity"].astype(int) if "multiplicity" in table else 1
    return np.repeat(table[column], times)[:count]


def test_box_a01() -> None:
    found = modes(_case(box(4, 3, 3, (1.9, 1.35, 1.1))), 16)
    assert found.frequencies[0] < 0.05  # the uniform pressure
    assert np.allclose(found.frequencies[1:], _expand("A01_box_eigenfrequencies.csv", 15), rtol=1e-4)


def test_box_near_a_frequency_a01() -> None:
    exact = _expand("A01_box_eigenfrequencies.csv", 60)
    found = modes(_case(box(4, 3, 3, (1.9, 1.35, 1.1)), order=6), 6, near=300.0).frequencies
    assert np.allclose(found, np.sort(exact[np.argsort(np.abs(exact - 300.0))[:6]]), rtol=1e-4)


def test_shapes_are_those_of_the_box() -> None:
    found = modes(_case(box(4, 3, 3, (1.9, 1.35, 1.1))), 2)
    space = found.space
    x = space.geometry.nodes[space.topology.vertex_nodes, 0]
    shape = found.shapes[: space.topology.n_vertices, 1]
    assert np.allclose(np.abs(shape), np.abs(np.cos(np.pi * x / 1.9)), atol=1e-3)


def test_sphere_a10() -> None:
    found = modes(_case(ball(2), order=4), 15)
    exact = _expand("A10_sphere_eigenfrequencies.csv", 14, "f_Hz_a0.5")
    assert np.allclose(found.frequencies[1:], exact, rtol=1e-3)
    assert np.ptp(found.frequencies[1:4]) < 0.05  # a triple one


def test_prism_a11() -> None:
    found = modes(_case(prism(2, 2)), 12)
    assert np.allclose(found.frequencies[1:], _expand("A11_equilateral_prism_eigenfrequencies.csv", 11), rtol=1e-4)


def test_two_fluids_a12() -> None:
    mesh = grid([0, 0.55, 1.1, 1.4, 1.7], [0, 0.4, 0.8], [0, 0.5])
    regions = (Region("light", GivenFluid(1.21, 343.0)), Region("heavy", GivenFluid(1.84, 268.0)))
    tet_region = (mesh.centroids[:, 0] > 1.1).astype(np.int64)
    found = modes(_case(mesh, regions=regions, tet_region=tet_region), 13)
    assert np.allclose(found.frequencies[1:], _expand("A12_two_fluid_box_eigenfrequencies.csv", 12), rtol=1e-4)


def test_a_pressure_release_wall() -> None:
    """f = (c/2) sqrt(((n + 1/2)/Lx)^2 + ...): an odd quarter wave between the open and the closed end."""
    found = modes(_case(box(4, 2, 2, (1.0, 0.3, 0.2)), {"x0": Pressure()}), 3)
    assert np.allclose(found.frequencies, 343.0 / 2 * np.array([0.5, 1.5, 2.5]), rtol=1e-4)


def test_too_many_modes_are_refused() -> None:
    with pytest.raises(CaseError, match=r"9 modes are asked of 8 unknowns; ask for 1 \.\. 6"):
        modes(_case(box(1, 1, 1), order=1), 9)
