"""Surfaces inside the fluid: sides with kinds of their own, transfer impedance, orientation, and what is refused."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from cases import AIR, RHO_C, case_of, lossy
from meshes import TestMesh, faces_where, grid
from murmesh.solver.case.boundary import Boundary, Impedance, Rigid, Sheet, Vibrating
from murmesh.solver.case.load import SurfaceVelocity
from murmesh.solver.case.model import Case, Region
from murmesh.solver.case.motion import Uniform
from murmesh.solver.case.wall import Given
from murmesh.solver.errors import MeshError
from murmesh.solver.sweep import solve

LENGTH, AT = 1.2, 0.7
RECEIVERS = {"a": (0.3, 0.05, 0.05), "b": (1.0, 0.05, 0.05)}


def _duct(size: float = 0.1) -> TestMesh:
    """A duct along x with an inner surface "sheet" across it at x = AT."""
    mesh = grid(np.concatenate([np.linspace(0, AT, 5), np.linspace(AT, LENGTH, 5)[1:]]), [0, size], [0, size])
    across = faces_where(mesh, lambda x: np.isclose(x[..., 0], AT))
    return TestMesh(mesh.nodes, mesh.tets, {**mesh.surfaces, "sheet": across})


def _solve(kinds: dict[str, Boundary], moves: str = "x0", f: tuple[float, ...] = (150.0, 400.0), **more: Any) -> np.ndarray:
    case = _case(kinds, moves, f, **more)
    result = solve(case)
    assert np.abs(result.imbalance()).max() < 1e-8
    return result.load_cases[0].contributions[:, :, 0]


def _case(kinds: dict[str, Boundary], moves: str = "x0", f: tuple[float, ...] = (150.0, 400.0), **more: Any) -> Case:
    loads = [SurfaceVelocity(moves, Uniform(0.01 + 0j))]
    return case_of(_duct(), kinds, loads, f, RECEIVERS, order=6, **({"damping": lossy(0.02)} | more))


def _closed(x: float, length: float, f: np.ndarray, velocity: complex = 0.01) -> np.ndarray:
    """A duct with a piston at 0 and a rigid end: p = -i rho c v cos k(L - x) / sin kL, with the loss of `lossy(0.02)`."""
    speed = 343.0 / np.sqrt(1 - 0.02j)
    k = 2 * np.pi * f / speed
    return -1j * 1.21 * speed * velocity * np.cos(k * (length - x)) / np.sin(k * length)


def test_a_rigid_sheet_across_a_duct_closes_it() -> None:
    p = _solve({"x0": Vibrating(), "sheet": Sheet(Rigid(), Rigid())})
    exact = _closed(0.3, AT, np.array([150.0, 400.0]))
    assert np.abs(p[:, 0] - exact).max() < 1e-4 * np.abs(exact).max()
    assert np.abs(p[:, 1]).max() < 1e-9 * np.abs(exact).max()


def test_a_transfer_impedance_against_the_exact_duct() -> None:
    """Two ducts in series with Z_t between them: Z at the sheet = Z_t - i rho c cot k(L - a)."""
    f = np.array([150.0, 400.0])
    z_t = (0.5 + 1.2j) * RHO_C
    sheet = Sheet(Rigid(), Rigid(), Given(0.5 + 1.2j, "rho_c"))
    p = _solve({"x0": Vibrating(), "sheet": sheet})
    speed = 343.0 / np.sqrt(1 - 0.02j)
    k, rho_c = 2 * np.pi * f / speed, 1.21 * speed
    zeta = (z_t - 1j * rho_c / np.tan(k * (LENGTH - AT))) / rho_c
    exact = rho_c * 0.01 * (zeta * np.cos(k * (AT - 0.3)) + 1j * np.sin(k * (AT - 0.3)))
    exact = exact / (np.cos(k * AT) + 1j * zeta * np.sin(k * AT))
    assert np.abs(p[:, 0] - exact).max() < 1e-4 * np.abs(exact).max()


@pytest.mark.parametrize(
    "front", [{"front_direction": (-1.0, 0.0, 0.0)}, {"front_direction": (1.0, 0.0, 0.0)}, {"front_region": "left"}]
)
def test_sides_carry_their_own_kinds(front: dict[str, Any]) -> None:
    """The side towards the piston absorbs, the other is hard, however the front is said."""
    soft = Impedance(Given(2.0 + 0j))
    sides = (Rigid(), soft) if front.get("front_direction") == (1.0, 0.0, 0.0) else (soft, Rigid())
    mesh = _duct()
    halves = {"regions": (Region("left", AIR, lossy(0.02)), Region("right", AIR, lossy(0.02)))}
    tet_region = (mesh.centroids[:, 0] > AT).astype(np.int64)
    p = _solve({"x0": Vibrating(), "sheet": Sheet(*sides, **front)}, tet_region=tet_region, **halves)
    speed = 343.0 / np.sqrt(1 - 0.02j)
    k, rho_c = 2 * np.pi * np.array([150.0, 400.0]) / speed, 1.21 * speed
    zeta = 2.0 * RHO_C / rho_c
    exact = rho_c * 0.01 * (zeta * np.cos(k * (AT - 0.3)) + 1j * np.sin(k * (AT - 0.3)))
    exact = exact / (np.cos(k * AT) + 1j * zeta * np.sin(k * AT))
    assert np.abs(p[:, 0] - exact).max() < 1e-4 * np.abs(exact).max()
    assert np.abs(p[:, 1]).max() < 1e-9


def test_a_moving_sheet_pushes_one_side_and_pulls_the_other() -> None:
    """Positive = into the air in front: with the front towards +x the right duct is compressed, the left one expanded."""
    f = np.array([150.0, 400.0])
    sheet = Sheet(Vibrating(), Vibrating(), front_direction=(1.0, 0.0, 0.0))
    p = _solve({"sheet": sheet}, moves="sheet")
    right, left = _closed(0.3, LENGTH - AT, f), _closed(AT - 0.3, AT, f, -0.01)
    assert np.abs(p[:, 1] - right).max() < 1e-4 * np.abs(right).max()
    assert np.abs(p[:, 0] - left).max() < 1e-4 * np.abs(left).max()
    turned = _solve({"sheet": sheet.with_(front_direction=(-1.0, 0.0, 0.0))}, moves="sheet")
    assert np.allclose(turned, -p)


def test_a_sheet_with_a_free_edge_lets_sound_around_it() -> None:
    mesh = grid(np.linspace(0, 1, 6), np.linspace(0, 0.6, 4), np.linspace(0, 0.4, 3))
    half = faces_where(mesh, lambda x: np.isclose(x[..., 0], 0.4) & (x[..., 1] < 0.41))
    mesh = TestMesh(mesh.nodes, mesh.tets, {**mesh.surfaces, "sheet": half})
    loads = [SurfaceVelocity("x0", Uniform(0.01 + 0j))]
    behind = {"r": (0.5, 0.1, 0.2)}
    found = []
    for kinds in (
        {"x0": Vibrating(), "sheet": Sheet(Rigid(), Rigid())},
        {"x0": Vibrating(), "sheet": Sheet(transfer=Given(1e-4))},
    ):
        case = case_of(mesh, kinds, loads, [200.0], behind, damping=lossy(0.05), order=4)
        found.append(solve(case).load_cases[0].contributions[0, 0, 0])
    open_mesh = TestMesh(mesh.nodes, mesh.tets, {k: v for k, v in mesh.surfaces.items() if k != "sheet"})
    case = case_of(open_mesh, {"x0": Vibrating()}, loads, [200.0], behind, damping=lossy(0.05), order=4)
    nothing = solve(case).load_cases[0].contributions[0, 0, 0]
    assert found[1] == pytest.approx(nothing, rel=1e-3)  # a sheet without resistance is no sheet
    assert abs(found[0] / nothing - 1) > 0.05  # a rigid one shadows,
    assert abs(found[0]) > 0.05 * abs(nothing)  # but sound passes its edge


@pytest.mark.parametrize(
    ("kinds", "words"),
    [
        (
            {"x1": Sheet(Rigid(), Rigid())},
            "surfaces/x1: triangle .* lies on the outside of the mesh; a two-sided surface needs",
        ),
        ({"sheet": Vibrating()}, "lie inside the fluid, but its kind is 'vibrating'.*make it a sheet"),
    ],
)
def test_what_is_refused(kinds: dict[str, Boundary], words: str) -> None:
    with pytest.raises(MeshError, match=words):
        solve(_case({"x0": Vibrating()} | kinds))


def test_a_front_region_must_touch_the_sheet() -> None:
    mesh = _duct()
    regions = (Region("left", AIR), Region("right", AIR))
    tet_region = (mesh.centroids[:, 0] < 0.2).astype(np.int64)
    case = _case({"x0": Vibrating(), "sheet": Sheet(front_region="right")}, regions=regions, tet_region=tet_region)
    with pytest.raises(MeshError, match="does not touch its front_region 'right'"):
        solve(case)
