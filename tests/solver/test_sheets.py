"""Surfaces inside the fluid: sides with kinds of their own, transfer impedance, orientation, and what is refused."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from cases import AIR, RHO_C, case_of, lossy
from meshes import TestMesh, faces_where, grid
from murmesh.solver.case.boundary import Boundary, Impedance, Pressure, Rigid, Sheet, Vibrating, VibratingTreated
from murmesh.solver.case.load import SurfaceVelocity
from murmesh.solver.case.model import Case, Region
from murmesh.solver.case.motion import Scan, Uniform
from murmesh.solver.case.wall import Given
from murmesh.solver.errors import MeshError
from murmesh.solver.space import discretise
from murmesh.solver.sweep import solve
from murmesh.solver.system import uncovered_area

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
    # what passes, (p_left - p_right)/Z_t, drives the closed duct behind
    through = 0.01 / (np.cos(k * AT) + 1j * zeta * np.sin(k * AT))
    behind = through * _closed(0.3, LENGTH - AT, f, 1.0)
    assert np.abs(p[:, 1] - behind).max() < 1e-4 * np.abs(behind).max()


@pytest.mark.parametrize("front", [1.0, -1.0])
def test_a_moving_plate_with_holes(front: float) -> None:
    """v = v_s + (p_behind - p_in_front)/Z_t passes towards the front; a closed duct on either side."""
    f = np.array([150.0, 400.0])
    sheet = Sheet(Vibrating(), Vibrating(), Given(0.5 + 1.2j, "rho_c"), front_direction=(front, 0.0, 0.0))
    p = _solve({"sheet": sheet}, moves="sheet")
    load = _closed(0.0, AT, f, 1.0) + _closed(0.0, LENGTH - AT, f, 1.0)  # both ducts, seen from the sheet
    velocity = front * 0.01 / (1 + load / ((0.5 + 1.2j) * RHO_C))
    left, right = -velocity * _closed(AT - 0.3, AT, f, 1.0), velocity * _closed(0.3, LENGTH - AT, f, 1.0)
    assert np.abs(p[:, 0] - left).max() < 1e-4 * np.abs(left).max()
    assert np.abs(p[:, 1] - right).max() < 1e-4 * np.abs(right).max()


def test_a_scan_of_a_sheet_counts_its_area_once() -> None:
    """A third of the sheet is scanned; the rest is missed once, not once per side."""
    y, z = (a.ravel() for a in np.meshgrid(np.linspace(0, 0.03, 5), np.linspace(0, 0.1, 9)))
    points = np.column_stack([np.full(len(y), AT), y, z])
    scan = Scan(points, np.array([50.0, 500.0]), np.full((2, len(y)), 0.01 + 0j))
    sheet = Sheet(front_direction=(1.0, 0.0, 0.0))
    case = case_of(_duct(), {"sheet": sheet}, [SurfaceVelocity("sheet", scan)], [150.0], RECEIVERS, order=6)
    uncovered = uncovered_area(discretise(case), SurfaceVelocity("sheet", scan))
    assert 0.4 < uncovered / 0.1**2 < 0.75
    right = _closed(0.3, LENGTH - AT, np.array([150.0]))[0]
    found = solve(case.with_(regions=(case.regions[0].with_(damping=lossy(0.02)),))).load_cases[0].contributions[0, 1, 0]
    assert abs(found - right) < 1e-4 * abs(right)


def test_a_moving_sheet_with_one_treated_side() -> None:
    """In front v_n = v_s + p/Z: p = v / (i sin(kl)/(rho c) + cos(kl)/Z) cos k(l - x); behind the sheet is bare."""
    f = np.array([150.0, 400.0])
    treated = VibratingTreated(Given(2.0 - 1.0j, "rho_c"))
    p = _solve({"sheet": Sheet(treated, Vibrating(), front_direction=(1.0, 0.0, 0.0))}, moves="sheet")
    speed, length = 343.0 / np.sqrt(1 - 0.02j), LENGTH - AT
    k, rho_c = 2 * np.pi * f / speed, 1.21 * speed
    wall = (2.0 - 1.0j) * RHO_C
    right = 0.01 / (1j * np.sin(k * length) / rho_c + np.cos(k * length) / wall) * np.cos(k * (length - 0.3))
    left = _closed(AT - 0.3, AT, f, -0.01)
    assert np.abs(p[:, 1] - right).max() < 1e-4 * np.abs(right).max()
    assert np.abs(p[:, 0] - left).max() < 1e-4 * np.abs(left).max()


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


def _halves() -> tuple[TestMesh, TestMesh]:
    """Half a box, 0 < x < 0.5, whose end is "wall" below y = 0.4 and "open" above; and the box with its mirror image."""
    half = grid(np.linspace(0, 0.5, 4), np.linspace(0, 0.6, 4), np.linspace(0, 0.4, 3))

    def wall(x: np.ndarray) -> np.ndarray:
        return np.isclose(x[..., 0], 0.5) & (x[..., 1] < 0.41)

    def gap(x: np.ndarray) -> np.ndarray:
        return np.isclose(x[..., 0], 0.5) & (x[..., 1] > 0.39)

    sides = {"x0": half.surfaces["x0"], "wall": faces_where(half, wall), "open": faces_where(half, gap)}
    count = len(half.nodes)
    shared = np.isclose(half.nodes[:, 0], 0.5)
    image = np.where(shared, np.arange(count), count + np.cumsum(~shared) - 1)
    mirrored = half.nodes[~shared] * [-1, 1, 1] + [1, 0, 0]
    full = TestMesh(
        np.concatenate([half.nodes, mirrored]),
        np.concatenate([half.tets, image[half.tets][:, [0, 1, 3, 2]]]),
        {"x0": sides["x0"], "x1": image[sides["x0"]], "sheet": sides["wall"]},
    )
    return TestMesh(half.nodes, half.tets, sides), full


def test_a_free_edge_by_symmetry() -> None:
    """Driven in opposite phase from both ends, p = 0 in the gap beside a rigid half-wall: half the box says the same."""
    half, full = _halves()
    f, ear, move = [120.0, 310.0], {"r": (0.31, 0.22, 0.13)}, Uniform(0.01 + 0j)
    exact = solve(case_of(half, {"x0": Vibrating(), "open": Pressure()}, [SurfaceVelocity("x0", move)], f, ear, order=4))
    loads = [SurfaceVelocity("x0", move), SurfaceVelocity("x1", Uniform(-0.01 + 0j))]
    kinds: dict[str, Boundary] = {"x0": Vibrating(), "x1": Vibrating(), "sheet": Sheet(Rigid(), Rigid())}
    found = solve(case_of(full, kinds, loads, f, ear, order=4))
    p, q = (result.load_cases[0].contributions[:, 0].sum(axis=1) for result in (found, exact))
    assert np.allclose(p, q, rtol=1e-9)


def test_a_sheet_is_the_limit_of_a_thin_slit() -> None:
    """A slit cut out of the mesh, 8 mm and 4 mm wide: its distance from the sheet shrinks with its width."""

    def slit(width: float) -> complex:
        xs = np.array([0, 0.2, 0.4, 0.4 + width, 0.6, 0.8, 1.0])
        mesh = grid(xs, np.linspace(0, 0.6, 4), [0, 0.4])
        x, y, _ = mesh.centroids.T
        tets = mesh.tets[~((x > 0.4) & (x < 0.4 + width) & (y < 0.4))]
        used, inverse = np.unique(tets, return_inverse=True)
        cut = TestMesh(mesh.nodes[used], inverse.reshape(-1, 4))
        return _behind(TestMesh(cut.nodes, cut.tets, {"x0": faces_where(cut, lambda x: x[..., 0] == 0)}), {})

    mesh = grid([0, 0.2, 0.4, 0.6, 0.8, 1.0], np.linspace(0, 0.6, 4), [0, 0.4])
    half = faces_where(mesh, lambda x: np.isclose(x[..., 0], 0.4) & (x[..., 1] < 0.41))
    mesh = TestMesh(mesh.nodes, mesh.tets, {"x0": mesh.surfaces["x0"], "sheet": half})
    thin = _behind(mesh, {"sheet": Sheet(Rigid(), Rigid())})
    wide, narrow = (abs(slit(width) / thin - 1) for width in (0.008, 0.004))
    assert 1e-3 < wide < 0.05
    assert narrow < 0.65 * wide


def _behind(mesh: TestMesh, kinds: dict[str, Boundary]) -> complex:
    loads = [SurfaceVelocity("x0", Uniform(0.01 + 0j))]
    case = case_of(mesh, {"x0": Vibrating()} | kinds, loads, [200.0], {"r": (0.55, 0.1, 0.2)}, damping=lossy(0.05), order=6)
    return complex(solve(case).load_cases[0].contributions[0, 0, 0])


def _oriented(turned: int, **front: Any) -> Case:
    """The moving sheet with its triangles looking towards +x, the first `turned` of them the other way."""
    mesh = _duct()
    x, triangles = mesh.nodes, mesh.surfaces["sheet"].copy()
    normal = np.cross(x[triangles[:, 1]] - x[triangles[:, 0]], x[triangles[:, 2]] - x[triangles[:, 0]])[:, 0]
    turn = (normal < 0) ^ (np.arange(len(triangles)) < turned)
    triangles[turn] = triangles[turn][:, [0, 2, 1]]
    mesh = TestMesh(x, mesh.tets, {**mesh.surfaces, "sheet": triangles})
    loads = [SurfaceVelocity("sheet", Uniform(0.01 + 0j))]
    kinds: dict[str, Boundary] = {"sheet": Sheet(Vibrating(), Vibrating(), **front)}
    return case_of(mesh, kinds, loads, [150.0], RECEIVERS, order=6, damping=lossy(0.02))


def test_the_front_is_where_the_triangles_look() -> None:
    right = _closed(0.3, LENGTH - AT, np.array([150.0]))[0]
    for turned, sign in ((0, 1.0), (2, -1.0)):
        p = solve(_oriented(turned)).load_cases[0].contributions[0, 1, 0]
        assert abs(p - sign * right) < 1e-4 * abs(right)


@pytest.mark.parametrize(
    ("case", "words"),
    [
        (_oriented(1), "surfaces/sheet: the front of the sheet changes sides along 1 of .*orient its triangles alike"),
        (_oriented(0, front_direction=(0.0, 1.0, 0.0)), "cannot be told from its front_direction.*give front_region"),
    ],
)
def test_a_front_that_cannot_be_told(case: Case, words: str) -> None:
    """Half the sheet would push where the other half pulls."""
    with pytest.raises(MeshError, match=words):
        solve(case)


def test_a_tube_has_a_front_by_its_region_but_not_along_a_direction() -> None:
    """A square tube inside a box whose wall moves inwards: far below its modes p = rho c^2 area displacement / volume."""
    mesh = grid([0, 0.3, 0.5, 0.8], [0, 0.2, 0.4, 0.7], [0, 0.3])
    x, y, _ = mesh.centroids.T
    core = (x > 0.3) & (x < 0.5) & (y > 0.2) & (y < 0.4)

    def tube(at: np.ndarray) -> np.ndarray:
        x, y = at[..., 0], at[..., 1]
        within = (x > 0.29) & (x < 0.51) & (y > 0.19) & (y < 0.41)
        flat = [np.isclose(v, c).all(axis=-1, keepdims=True) for v, cs in ((x, (0.3, 0.5)), (y, (0.2, 0.4))) for c in cs]
        return within & np.logical_or.reduce(flat)

    mesh = TestMesh(mesh.nodes, mesh.tets, {**mesh.surfaces, "tube": faces_where(mesh, tube)})
    assert len(mesh.surfaces["tube"]) == 8
    regions = (Region("outside", AIR), Region("core", AIR))
    case = case_of(
        mesh, {"tube": Sheet(front_region="core")}, [SurfaceVelocity("tube", Uniform(1e-3 + 0j))], [5.0],
        {"in": (0.4, 0.3, 0.1), "out": (0.1, 0.1, 0.1)}, regions=regions, tet_region=core.astype(np.int64), order=3,
    )  # fmt: skip
    inside, outside = solve(case).load_cases[0].contributions[0, :, 0] * 2j * np.pi * 5.0 / (1.21 * 343.0**2)
    moved = 1e-3 * 0.8 * 0.3
    assert inside == pytest.approx(moved / (0.04 * 0.3), rel=1e-3)
    assert outside == pytest.approx(-moved / ((0.8 * 0.7 - 0.04) * 0.3), rel=0.01)
    surfaces = tuple(s.with_(boundary=Sheet(front_direction=(1.0, 0, 0))) if s.name == "tube" else s for s in case.surfaces)
    with pytest.raises(MeshError, match="surfaces/tube: the front of the sheet changes sides along"):
        solve(case.with_(surfaces=surfaces))


def test_a_hard_sheet_at_rest_needs_no_front() -> None:
    case = _oriented(1)
    surfaces = tuple(s.with_(boundary=Vibrating()) if s.name == "x0" else s for s in case.surfaces)
    loads = case.load_cases[0].with_(loads=(SurfaceVelocity("x0", Uniform(0.01 + 0j)),))
    p = solve(case.with_(surfaces=surfaces, load_cases=(loads,))).load_cases[0].contributions[0, :, 0]
    exact = _closed(0.3, AT, np.array([150.0]))[0]
    assert abs(p[0] - exact) < 1e-4 * abs(exact) and abs(p[1]) < 1e-9


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
