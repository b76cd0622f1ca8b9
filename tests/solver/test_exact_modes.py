"""`modes` of a case against closed forms; the bare matrices are checked in tests/convergence.

Sources of the values: headers of A01, A09, A10, A11 and A12 in tests/references.
"""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import numpy as np
import pytest

from cases import case_of, monopole
from meshes import TestMesh, ball, box, cylinder, grid, prism
from murmesh.solver.assembly import evaluate
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


@pytest.mark.parametrize(("near", "count"), [(62.0, 1), (75.0, 2), (100.0, 4)])
def test_nearest_is_meant_in_frequency(near: float, count: int) -> None:
    """The nearest in w^2 are others: at 62 Hz the uniform pressure at 0 Hz instead of 90.26 Hz."""
    exact = np.append(0.0, _expand("A01_box_eigenfrequencies.csv", 60))
    found = modes(_case(box(4, 3, 3, (1.9, 1.35, 1.1))), count, near).frequencies
    assert np.allclose(found, np.sort(exact[np.argsort(np.abs(exact - near))[:count]]), rtol=1e-4)
    in_squares = np.sort(exact[np.argsort(np.abs(exact**2 - near**2))[:count]])
    assert not np.allclose(found, in_squares, rtol=1e-3)


def test_every_mode_of_a_cube_is_found() -> None:
    """Single, triple and sixfold ones: Lanczos must not lose a copy."""
    n = np.arange(6)
    exact = np.sort(343.0 / 2 * np.sqrt((n[:, None, None] ** 2 + n[:, None] ** 2 + n**2).ravel()))[:30]
    found = modes(_case(box(3, 3, 3)), 30).frequencies
    assert np.allclose(found[1:], exact[1:], rtol=1e-4)


def test_shapes_are_those_of_the_box() -> None:
    found = modes(_case(box(4, 3, 3, (1.9, 1.35, 1.1))), 2)
    space = found.space
    x = space.geometry.nodes[space.topology.vertex_nodes, 0]
    shape = found.shapes[: space.topology.n_vertices, 1]
    assert np.allclose(np.abs(shape), np.abs(np.cos(np.pi * x / 1.9)), atol=1e-3)


def test_cylinder_a09() -> None:
    found = modes(_case(cylinder(2, 2)), 21).frequencies[1:]
    assert np.allclose(found, _expand("A09_cylinder_eigenfrequencies.csv", 20), rtol=5e-4)
    straight = modes(_case(cylinder(2, 2, order=1)), 21).frequencies[1:]
    assert not np.allclose(straight, _expand("A09_cylinder_eigenfrequencies.csv", 20), rtol=1e-3)


def test_sphere_a10() -> None:
    """Multiplicities 3, 5, 1, 7, 9, 3: copies lie closer together than the geometry's own error."""
    found = modes(_case(ball(2), order=4), 29).frequencies[1:]
    assert np.allclose(found, _expand("A10_sphere_eigenfrequencies.csv", 28, "f_Hz_a0.5"), rtol=1e-3)
    ends = np.cumsum([0, 3, 5, 1, 7, 9, 3])
    for start, stop in pairwise(ends):
        assert np.ptp(found[start:stop]) < 1e-3 * found[start]


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


def test_a_box_with_one_soft_wall() -> None:
    """f = (c/2) sqrt(((n + 1/2)/Lx)^2 + (m/Ly)^2 + (l/Lz)^2), from near the middle of the spectrum."""
    n = np.arange(8)
    exact = 343.0 / 2 * np.sqrt(((n + 0.5) / 1.9)[:, None, None] ** 2 + (n / 1.35)[:, None] ** 2 + (n / 1.1) ** 2).ravel()
    found = modes(_case(box(4, 3, 3, (1.9, 1.35, 1.1)), {"x1": Pressure()}), 12, near=250.0).frequencies
    assert np.allclose(found, np.sort(exact[np.argsort(np.abs(exact - 250.0))[:12]]), rtol=1e-4)


def test_a_shape_whose_nodes_are_the_vertices() -> None:
    """sin(2 pi x) between two soft ends vanishes at every vertex of a mesh of two cells; its peak is 1 all the same."""
    case = _case(box(2, 1, 1, (1.0, 0.1, 0.1)), {"x0": Pressure(), "x1": Pressure()})
    found = modes(case, 2)
    space = found.space
    points = np.column_stack([np.linspace(0.01, 0.99, 99), np.full((99, 2), 0.031)])
    shapes = evaluate(space.geometry, space.dofs, *space.geometry.locate(points)) @ found.shapes
    for j in range(2):
        wave = np.sin((j + 1) * np.pi * points[:, 0])
        assert np.abs(np.abs(shapes[:, j]) - np.abs(wave)).max() < 0.01


def test_too_many_modes_are_refused() -> None:
    with pytest.raises(CaseError, match=r"9 modes are asked of 8 unknowns; ask for 1 \.\. 6"):
        modes(_case(box(1, 1, 1), order=1), 9)
