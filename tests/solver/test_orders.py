"""The order of every element: what the rule looks at, that it holds, sub-bands, and mixed orders from end to end."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

import meshes
from cases import AIR, RHO_C, case_of, lossy, monopole
from murmesh.solver import sweep as sweep_module
from murmesh.solver.assembly import Geometry, evaluate, surface_load, surface_mass, volume_matrices
from murmesh.solver.bands import plan_bands
from murmesh.solver.case.boundary import Impedance, Rigid, Sheet, Vibrating
from murmesh.solver.case.load import SurfaceVelocity
from murmesh.solver.case.medium import GivenFluid, NoDamping
from murmesh.solver.case.model import Case, Region
from murmesh.solver.case.motion import Uniform
from murmesh.solver.case.wall import Given
from murmesh.solver.dofs import DofMap
from murmesh.solver.orders import (
    UNKNOWNS,
    a_priori_error,
    element_orders,
    elements_kh,
    expected_errors,
    local_error,
    modal_loss,
    orders_text,
    wavenumber_shift,
)
from murmesh.solver.space import discretise
from murmesh.solver.sweep import Progress, solve
from murmesh.solver.topology import Topology
from reading import read_csv_reference


def _graded(frequency: float = 600.0, accuracy: float = 0.1, **more: object) -> Case:
    """A duct whose cells grow sixfold from the driven end to the absorbing one."""
    xs = np.concatenate([np.linspace(0, 0.2, 7), [0.25, 0.32, 0.42, 0.58, 0.8, 1.0]])
    mesh = meshes.grid(xs, [0, 0.08, 0.16], [0, 0.08, 0.16])
    kinds = {"x0": Vibrating(), "x1": Impedance(Given(0.7 - 0.3j))}
    loads = [SurfaceVelocity("x0", Uniform(1e-3 + 0j))]
    ears = {f"ear{i}": (x, 0.05, 0.07) for i, x in enumerate((0.11, 0.36, 0.5, 0.72, 0.93))}
    return case_of(mesh, kinds, loads, more.pop("lines", [frequency]), ears, damping=lossy(0.02), accuracy=accuracy, **more)


def _exact(case: Case, x: np.ndarray) -> np.ndarray:
    """p(x) of the plane wave: v = 1 mm/s into the air at x = 0, p/v = Z at x = L."""
    w = 2 * np.pi * case.sweep.frequencies[0]
    k, rho_c, z = w / 343.0 * np.sqrt(1 - 0.02j), RHO_C / np.sqrt(1 - 0.02j), (0.7 - 0.3j) * RHO_C
    back = (z - rho_c) / (z + rho_c) * np.exp(-2j * k)
    return 1e-3 * rho_c * (np.exp(-1j * k * x) + back * np.exp(1j * k * x)) / (1 - back)


# --- the rule ---------------------------------------------------------------------------------------------------------


def test_the_shift_is_that_of_the_published_dispersion() -> None:
    """Ihlenburg & Babuska (1997), Ainsworth (2004): leading term, column `leading_estimate` of the table."""
    table = read_csv_reference("G01_dispersion_p_fem_1d.csv")
    for order, kh, estimate in zip(table["p"], table["kh"], table["leading_estimate"], strict=True):
        assert wavenumber_shift(np.array([float(kh)]))[0, int(order) - 1] == pytest.approx(abs(float(estimate)), rel=1e-9)


@pytest.mark.parametrize("order", [1, 2, 3, 5, 7])
def test_the_local_error_is_that_of_the_best_polynomial(order: int) -> None:
    """Plane waves on a regular tetrahedron, 8.686/sqrt(2) times the relative rms error of their L2 projection."""
    from murmesh.solver.elements.quadrature import tetrahedron_rule
    from murmesh.solver.elements.tetrahedron import basis

    corners = np.array([[0, 0, 0], [1, 0, 0], [0.5, 0.75**0.5, 0], [0.5, 0.75**0.5 / 3, (2 / 3) ** 0.5]])
    ways = np.random.default_rng(0).normal(size=(20, 3))
    ways /= np.linalg.norm(ways, axis=1)[:, None]
    points, weights = tetrahedron_rule(20)
    waves = np.exp(-3j * points @ corners @ ways.T)  # kh = 3
    values = basis(order, points)[0]
    best = values @ np.linalg.solve(values.T @ (weights[:, None] * values), values.T @ (weights[:, None] * waves))
    error = np.sqrt(np.mean(weights @ np.abs(waves - best) ** 2) / weights.sum())
    assert local_error(np.array([3.0]))[0, order - 1] == pytest.approx(8.686 / np.sqrt(2) * error, rel=0.2)


def test_unknowns_per_element_are_those_of_a_large_mesh() -> None:
    topology = Topology.build(meshes.box(14, 14, 14).tets)
    for order, expected in enumerate(UNKNOWNS, start=1):
        assert DofMap.build(topology, order).n_dofs / topology.n_tets == pytest.approx(expected, rel=0.25)


def test_large_elements_get_higher_orders() -> None:
    space = discretise(_graded())
    kh, orders = elements_kh(space.case), space.dofs.orders
    assert orders[kh < np.quantile(kh, 0.3)].max() < orders[kh > np.quantile(kh, 0.9)].min() and space.order == orders.max()
    assert orders_text(orders) == f"orders {orders.min()} to {orders.max()}" and orders_text([4, 4]) == "order 4"


@pytest.mark.parametrize("accuracy", [0.3, 0.1, 0.01])
def test_the_accuracy_is_met_about_as_cheaply_as_by_the_best_uniform_order(accuracy: float) -> None:
    """The uniform order is chosen with hindsight; on larger boxes the rule is the cheaper one (tests/benchmarks)."""
    case = _graded(accuracy=accuracy)
    exact = np.abs(_exact(case, np.array([r.position[0] for r in case.receivers])))

    def error(order: int) -> tuple[float, int]:
        result = solve(case, order=order, method="direct")
        found = np.abs(result.load_cases[0].contributions.sum(axis=2)[0])
        return float(np.sqrt(np.mean((20 * np.log10(found / exact)) ** 2))), int(result.provenance["unknowns"])

    found, unknowns = error(0)
    assert found <= accuracy
    uniform = next(n for off, n in map(error, range(1, 9)) if off <= accuracy)
    assert unknowns < 1.2 * uniform


def test_the_rule_keeps_its_own_bound_and_a_stated_order_does_not() -> None:
    case = _graded()
    space = discretise(case)
    expected = expected_errors(case, space.topology, space.walls, space.dofs.orders)
    assert 0.02 < expected.max() <= 0.1
    assert expected_errors(case, space.topology, space.walls, np.full(len(case.mesh.tets), 1)).max() > 1
    assert discretise(case, 3).order == 3 and len(set(discretise(case, 3).dofs.orders)) == 1
    assert discretise(replace(case, sweep=replace(case.sweep, order=2))).order == 2


def test_more_loss_needs_fewer_unknowns_and_a_slower_fluid_more() -> None:
    mesh = meshes.box(3, 3, 3)
    held = np.arange(len(mesh.tets)) % 2
    count = []
    for regions in (
        (Region("a", AIR, lossy(0.2)), Region("b", AIR, lossy(0.2))),
        (Region("a", AIR, lossy(0.005)), Region("b", AIR, lossy(0.005))),
        (Region("a", AIR, lossy(0.005)), Region("b", GivenFluid(1.2, 200.0), lossy(0.005))),
    ):
        case = case_of(mesh, {}, [monopole((0.5, 0.05, 0.05))], [500.0], {}, regions=regions, tet_region=held)
        count.append(discretise(case).dofs.n_dofs)
    assert count[0] < count[1] < count[2]


def test_a_region_too_coarse_for_any_order_leaves_the_other_alone() -> None:
    mesh = meshes.grid(np.concatenate([np.linspace(0, 1, 11), [5.0]]), [0, 0.1], [0, 0.1])
    held = (mesh.centroids[:, 0] > 1).astype(np.int64)
    regions = (Region("fine", AIR, lossy(0.02)), Region("coarse", GivenFluid(1.2, 100.0), lossy(0.02)))
    case = case_of(mesh, {}, [monopole((0.5, 0.05, 0.05))], [1000.0], {}, regions=regions, tet_region=held)
    orders = discretise(case).dofs.orders
    assert orders[held == 1].min() == 8 and orders[held == 0].min() < 5


def test_modal_loss_adds_medium_and_walls() -> None:
    """eta + c alpha S / (4 w V), not above 1/(k l); a cube of 1 m with one absorbing wall of Z = 3 rho c, alpha = 3/4."""
    mesh, f = meshes.box(1, 1, 1), 500.0
    bare = case_of(mesh, {}, [monopole((0.5, 0.05, 0.05))], [f], {}, damping=lossy(0.01))
    lined = case_of(mesh, {"x1": Impedance(Given(3.0 + 0j))}, [monopole((0.5, 0.05, 0.05))], [f], {}, damping=lossy(0.01))
    assert modal_loss(bare, discretise(bare, 1).walls, f) == pytest.approx(0.01)
    assert modal_loss(lined, discretise(lined, 1).walls, f) == pytest.approx(0.01 + 343 * 0.75 / (8 * np.pi * f), rel=1e-3)
    dead = case_of(mesh, {}, [monopole((0.5, 0.05, 0.05))], [f], {}, damping=lossy(0.9))
    assert modal_loss(dead, discretise(dead, 1).walls, f) == pytest.approx(343 / (2 * np.pi * f * np.sqrt(3)))
    silent = case_of(mesh, {}, [monopole((0.5, 0.05, 0.05))], [f], {}, damping=NoDamping())
    assert modal_loss(silent, discretise(silent, 1).walls, f) == 0.003


def test_the_size_rule_falls_with_the_order() -> None:
    errors = [a_priori_error(2.0, p) for p in range(1, 9)]
    assert errors == sorted(errors, reverse=True)


# --- sub-bands --------------------------------------------------------------------------------------------------------


def test_bands_cover_the_sweep_and_are_selections() -> None:
    case = _graded(lines=np.arange(20.0, 801.0, 10.0))
    space = discretise(case)
    bands = plan_bands(space)
    assert len(bands) > 1
    assert np.array_equal(np.concatenate([np.arange(79)[band.lines] for band in bands]), np.arange(79))
    assert np.array_equal(bands[-1].orders, space.dofs.orders)
    stiffness, _ = volume_matrices(space.geometry, space.dofs)
    for low, high in pairwise(bands):
        assert np.all(low.orders <= high.orders) and low.unknowns < high.unknowns
        top = float(case.sweep.frequencies[low.lines.stop - 1])
        assert np.all(low.orders <= element_orders(case, space.topology, space.walls, top))
        lower = DofMap.build(space.topology, low.orders)
        chosen = space.dofs.selection_of(lower)
        own = volume_matrices(space.geometry, lower)[0]
        assert abs(stiffness[chosen][:, chosen] - own).max() < 1e-13 * abs(own).max()
        assert lower.n_dofs == low.unknowns


def test_bands_that_save_nothing_are_not_made() -> None:
    narrow = _graded(lines=np.arange(700.0, 801.0, 10.0))
    assert len(plan_bands(discretise(narrow))) == 1
    stated = _graded(lines=np.arange(20.0, 801.0, 10.0), order=4)
    assert len(plan_bands(discretise(stated))) == 1
    assert len(plan_bands(discretise(_graded()))) == 1


# --- mixed orders from end to end -------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["straight", "curved"])
def test_every_integral_of_mixed_orders_is_a_selection_of_the_uniform_one(name: str) -> None:
    mesh = meshes.shuffled(meshes.jiggled(meshes.box(2, 2, 1))) if name == "straight" else meshes.ball(1)
    topology, geometry = Topology.build(mesh.tets), Geometry(mesh.nodes, mesh.tets)
    mixed = DofMap.build(topology, np.random.default_rng(5).integers(1, 6, len(mesh.tets)))
    full = DofMap.build(topology, 5)
    chosen = full.selection_of(mixed)
    tet, face = topology.boundary_sides()

    def parts(dofs: DofMap) -> list[np.ndarray]:
        bary = np.random.default_rng(6).dirichlet(np.ones(4), 60)
        where = np.random.default_rng(7).integers(0, len(mesh.tets), 60)
        load = surface_load(geometry, dofs, tet, face, lambda x: np.cos(x[:, 0] + 2 * x[:, 1]), degree=14)
        rows = evaluate(geometry, dofs, where, bary)
        return [*volume_matrices(geometry, dofs), surface_mass(geometry, dofs, tet, face), load, rows]

    *squares, load, rows = parts(full)
    *own, own_load, own_rows = parts(mixed)
    for large, small in zip(squares, own, strict=True):
        # curved elements of different orders are integrated by different rules: K there is no polynomial
        assert abs(large[chosen][:, chosen] - small).max() < (1e-13 if name == "straight" else 1e-5) * abs(small).max()
    assert abs(load[chosen] - own_load).max() < 1e-13
    assert abs(rows[:, chosen] - own_rows).max() < 1e-13


def test_a_mixed_sweep_with_sheet_and_impedance_balances(monkeypatch: pytest.MonkeyPatch) -> None:
    """Orders drawn at random from 5 to 8 give what order 8 gives, and every check of the sweep holds."""
    box = meshes.box(2, 2, 2, (1.0, 0.8, 0.6))
    shelf = meshes.faces_where(box, lambda x: (x[..., 0] == 0.5) & (x[..., 1] <= 0.4))
    mesh = replace(box, surfaces={**box.surfaces, "shelf": shelf})
    transfer = Sheet(Rigid(), Rigid(), transfer=Given(0.3 + 0.4j), front_direction=(1.0, 0.0, 0.0))
    kinds = {"x0": Vibrating(), "x1": Impedance(Given(2 - 1j)), "shelf": transfer}
    loads = [SurfaceVelocity("x0", Uniform(1e-3 + 0j))]
    case = case_of(mesh, kinds, loads, [150.0, 240.0], {"ear": (0.7, 0.6, 0.2)}, damping=lossy(0.02))
    orders = np.random.default_rng(1).integers(5, 9, len(mesh.tets))
    fine = solve(case, order=8, method="direct")
    monkeypatch.setattr(sweep_module, "discretise", lambda case, order=0: discretise(case, orders=orders))
    monkeypatch.setattr(sweep_module, "plan_bands", lambda space: ())
    mixed = solve(case, method="direct")
    assert np.array_equal(mixed.orders, orders) and mixed.order == 8
    assert np.abs(mixed.imbalance()).max() < 1e-9 and mixed.load_cases[0].closure.max() < 1e-9
    levels = [10 * np.log10(r.mean_square("ear")) for r in (mixed, fine)]
    np.testing.assert_allclose(levels[0], levels[1], atol=0.02)


def test_a_direct_sweep_in_sub_bands(tmp_path: Path) -> None:
    """Lower lines use lower orders; fields come back in one numbering, and an interrupted sweep goes on band by band."""
    box = meshes.box(3, 3, 2, (1.0, 0.8, 0.6))
    loads = [SurfaceVelocity("x0", Uniform(1e-3 + 0j))]
    kinds = {"x0": Vibrating(), "x1": Impedance(Given(2 - 1j))}
    lines = np.arange(60.0, 601.0, 60.0)
    case = case_of(box, kinds, loads, lines, {"ear": (0.7, 0.6, 0.2)}, damping=lossy(0.02), field_frequencies=lines[[0, -1]])
    bands = plan_bands(discretise(case))
    assert len(bands) > 1 and bands[0].unknowns < 0.6 * bands[-1].unknowns
    banded, fine = solve(case, tmp_path / "lines", method="direct"), solve(case, order=8, method="direct")
    change = 10 * np.log10(banded.mean_square("ear") / fine.mean_square("ear"))
    assert 1e-4 < np.sqrt(np.mean(change**2)) < 0.15
    ear = np.array([[0.7, 0.6, 0.2]])
    for f, at in ((lines[0], 0), (lines[-1], -1)):
        heard = banded.pressure_at(ear, f)[0, 0]
        assert abs(heard - banded.load_cases[0].contributions[at].sum()) < 1e-9 * abs(heard)
    seen: list[Progress] = []
    solve(case, tmp_path / "lines", method="direct", report=seen.append)
    assert seen[-1].done == len(lines) and [p.done for p in seen] == list(range(1, len(lines) + 1))
    assert all(p.resumed for p in seen)
