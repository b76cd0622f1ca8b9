"""Unknowns, shapes, matrices, loads and evaluation on whole meshes."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg as la
import scipy.sparse as sp
import scipy.sparse.linalg as spla

from meshes import TestMesh, ball, box, cylinder, faces_where, grid, jiggled, quadratic, shuffled
from murmesh.solver import volumes
from murmesh.solver.assembly import (
    DofMap,
    Geometry,
    evaluate,
    evaluate_gradient,
    face_dofs,
    mass,
    stiffness,
    surface_area,
    surface_cross_mass,
    surface_load,
    surface_mass,
    surface_normals,
    surface_points,
    volume_matrices,
)
from murmesh.solver.elements.quadrature import tetrahedron_rule
from murmesh.solver.errors import MeshError
from murmesh.solver.topology import Topology

ORDERS = range(1, 9)
UNSTRUCTURED = shuffled(jiggled(box(2, 1, 1)), seed=4)
MESHES = {"straight": shuffled(jiggled(box(2, 2, 1))), "curved": cylinder(1, 1), "ball": ball(1)}


def _setup(mesh: TestMesh, orders, open_faces=None) -> tuple[Geometry, DofMap]:
    return Geometry(mesh.nodes, mesh.tets), DofMap.build(Topology.build(mesh.tets, open_faces), orders)


def _mixed(mesh: TestMesh, highest: int = 5) -> np.ndarray:
    return np.random.default_rng(2).integers(1, highest + 1, len(mesh.tets))


def _quadrature(geometry: Geometry, degree: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """tet (k,), bary (k, 4) and weights (k,) of a rule over the whole mesh."""
    points, weights = tetrahedron_rule(degree)
    every = np.arange(len(geometry.tets))
    det = geometry.jacobians(every, np.broadcast_to(points, (len(every), *points.shape)))[1]
    return np.repeat(every, len(points)), np.tile(points, (len(every), 1)), (det * weights).ravel()


def _polynomial(degree: int):
    """A function with every monomial up to the degree."""
    powers = np.array([(i, j, n - i - j) for n in range(degree + 1) for i in range(n + 1) for j in range(n - i + 1)])
    factors = np.random.default_rng(degree).uniform(0.5, 1.0, len(powers))
    return lambda x: np.prod(x[:, None, :] ** powers, axis=2) @ factors


def _project(geometry: Geometry, dofmap: DofMap, function) -> tuple[np.ndarray, float]:
    """The L2 projection of a function and its largest error, relative, at random points."""
    tet, bary, weights = _quadrature(geometry, 2 * dofmap.max_order + 2)
    rows = evaluate(geometry, dofmap, tet, bary)
    load = rows.T @ (weights * function(geometry.map(tet, bary)))
    found = spla.spsolve(mass(geometry, dofmap).tocsc(), load)
    rng = np.random.default_rng(1)
    where, lam = rng.integers(0, len(geometry.tets), 200), rng.dirichlet(np.ones(4), 200)
    exact = function(geometry.map(where, lam))
    return found, float(abs(evaluate(geometry, dofmap, where, lam) @ found - exact).max() / abs(exact).max())


# --- what the space holds ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("order", ORDERS)
def test_polynomials_are_reproduced_up_to_the_order_and_no_further(order) -> None:
    geometry, dofmap = _setup(UNSTRUCTURED, order)
    assert _project(geometry, dofmap, _polynomial(order))[1] < 1e-10
    assert _project(geometry, dofmap, _polynomial(order + 1))[1] > 1e-9


def test_mixed_orders_reproduce_the_lowest() -> None:
    orders = 3 + _mixed(UNSTRUCTURED, 4)
    geometry, dofmap = _setup(UNSTRUCTURED, orders)
    lowest = int(orders.min())
    assert lowest < orders.max()
    assert _project(geometry, dofmap, _polynomial(lowest))[1] < 1e-10
    assert _project(geometry, dofmap, _polynomial(lowest + 1))[1] > 1e-8


def test_number_of_unknowns() -> None:
    mesh = shuffled(box(3, 2, 2))
    topology = Topology.build(mesh.tets)
    for p in ORDERS:
        expected = topology.n_vertices + (p - 1) * topology.n_edges + (p - 1) * (p - 2) // 2 * topology.n_faces
        expected += (p - 1) * (p - 2) * (p - 3) // 6 * topology.n_tets
        dofmap = DofMap.build(topology, p)
        assert dofmap.n_dofs == expected
        np.testing.assert_array_equal(np.unique(dofmap.element_dofs(np.arange(topology.n_tets))), np.arange(expected))
        np.testing.assert_array_equal(dofmap.vertex_dofs, np.arange(topology.n_vertices))


def test_minimum_rule() -> None:
    mesh = box(1, 1, 1)
    orders = np.array([1, 4, 4, 4, 4, 4])
    topology = Topology.build(mesh.tets)
    dofmap = DofMap.build(topology, orders)
    low = topology.n_vertices + topology.tet_edge_ids[0]
    assert np.all(dofmap.sizes[low] == 0)
    assert np.any(dofmap.element_dofs([1, 2]) == -1)
    np.testing.assert_array_equal(np.unique(dofmap.element_dofs([0])), np.sort(topology.tet_vertex_ids[0]))


def _jump(mesh: TestMesh, dofmap: DofMap, geometry: Geometry, triangles: np.ndarray) -> float:
    """The largest jump of a random field of the space over points of two-sided triangles."""
    tet, _ = dofmap.topology.sides_of(triangles)
    field = np.random.default_rng(5).normal(size=dofmap.n_dofs)
    values = []
    lam = np.random.default_rng(6).dirichlet(np.ones(3), (len(tet), 4))
    for column in (0, 1):
        own = mesh.tets[tet[:, column], :4]
        bary = np.einsum("mpc,mtc->mpt", lam, own[:, :, None] == np.sort(triangles[:, :3], axis=1)[:, None, :])
        values.append(evaluate(geometry, dofmap, np.repeat(tet[:, column], 4), bary.reshape(-1, 4)) @ field)
    return float(abs(values[0] - values[1]).max())


@pytest.mark.parametrize("orders", [1, 2, 3, 5, 8, "mixed"])
@pytest.mark.parametrize("name", MESHES)
def test_the_pressure_does_not_jump(name, orders) -> None:
    mesh = MESHES[name]
    geometry, dofmap = _setup(mesh, _mixed(mesh, 8) if orders == "mixed" else orders)
    inner = faces_where(mesh, lambda x: np.ones(x.shape[:-1], dtype=bool))
    inner = inner[dofmap.topology.sides_of(inner)[0][:, 1] >= 0]
    assert _jump(mesh, dofmap, geometry, inner) < 1e-11


def test_selection_gives_the_matrices_of_a_lower_map() -> None:
    mesh = MESHES["straight"]
    topology, geometry = Topology.build(mesh.tets), Geometry(mesh.nodes, mesh.tets)
    low = DofMap.build(topology, _mixed(mesh, 4))
    high = DofMap.build(topology, low.orders + 1)
    chosen = high.selection_of(low)
    for fine, coarse in zip(volume_matrices(geometry, high), volume_matrices(geometry, low), strict=True):
        assert abs(fine[chosen][:, chosen] - coarse).max() < 1e-14 * abs(coarse).max()
    with pytest.raises(MeshError, match="same topology with lower or equal orders"):
        low.selection_of(high)


# --- an opened surface ------------------------------------------------------------------------------------------------


def _half_open(mesh: TestMesh) -> np.ndarray:
    return faces_where(mesh, lambda x: np.isclose(x[..., 0], 0.5) & (x[..., 1] < 0.51))


@pytest.mark.parametrize("orders", [1, 3, 4, "mixed"])
def test_the_pressure_jumps_at_an_opened_sheet_only(orders) -> None:
    mesh = shuffled(box(2, 2, 2))
    sheet = _half_open(mesh)
    geometry, dofmap = _setup(mesh, _mixed(mesh) if orders == "mixed" else orders, sheet)
    inner = faces_where(mesh, lambda x: np.ones(x.shape[:-1], dtype=bool))
    inner = inner[dofmap.topology.sides_of(inner)[0][:, 1] >= 0]
    known = {tuple(t) for t in sheet}
    rest = np.array([t for t in inner if tuple(t) not in known])
    assert len(rest) == len(inner) - len(sheet)
    assert _jump(mesh, dofmap, geometry, rest) < 1e-12
    assert _jump(mesh, dofmap, geometry, sheet) > 0.1


def test_the_rim_stays_closed() -> None:
    mesh = shuffled(box(2, 2, 2))
    geometry, dofmap = _setup(mesh, 4, _half_open(mesh))
    field = np.random.default_rng(0).normal(size=dofmap.n_dofs)
    for point, pressures in (((0.5, 0.5, 0.2), 1), ((0.5, 0.5, 0.5), 1), ((0.5, 0.2, 0.5), 2)):
        every = np.arange(len(mesh.tets))
        bary = geometry._barycentric(every, np.broadcast_to(point, (len(every), 3)))
        around = np.flatnonzero(bary.min(axis=1) > -1e-12)
        values = evaluate(geometry, dofmap, around, bary[around]) @ field
        assert len(np.unique(np.round(values, 9))) == pressures


def test_a_sheet_across_makes_two_rooms() -> None:
    mesh = shuffled(box(2, 1, 1))
    sheet = faces_where(mesh, lambda x: np.isclose(x[..., 0], 0.5))
    for open_faces, zeros in ((None, 1), (sheet, 2)):
        K, M = volume_matrices(*_setup(mesh, 3, open_faces))
        assert int((la.eigvalsh(K.toarray(), M.toarray()) < 1e-8).sum()) == zeros


@pytest.mark.parametrize("orders", [2, 4, "mixed"])
def test_cross_mass_of_an_opened_sheet(orders) -> None:
    """f^T B_ab g = int f g dS for polynomials, which are the same on both sides; rows live on a, columns on b."""
    mesh = shuffled(box(2, 2, 2))
    sheet = _half_open(mesh)
    geometry, dofmap = _setup(mesh, 1 + _mixed(mesh, 4) if orders == "mixed" else orders, sheet)
    tet, face = dofmap.topology.sides_of(sheet)
    left = np.argmin(mesh.centroids[tet, 0], axis=1)[:, None]
    (ta, tb), (fa, fb) = (
        (np.take_along_axis(v, left, 1)[:, 0], np.take_along_axis(v, 1 - left, 1)[:, 0]) for v in (tet, face)
    )
    B = surface_cross_mass(geometry, dofmap, (ta, fa), (tb, fb))
    f, _ = _project(geometry, dofmap, lambda x: x[:, 1] ** 2)
    g, _ = _project(geometry, dofmap, lambda x: x[:, 2])
    assert f @ B @ g == pytest.approx(0.5**3 / 3 * 0.5, rel=1e-10)
    assert abs(B - B.T).max() > 1e-3
    assert abs(B - surface_cross_mass(geometry, dofmap, (tb, fb), (ta, fa)).T).max() < 1e-16
    rows, cols = np.unique(B.tocoo().row), np.unique(B.tocoo().col)
    assert np.all(np.isin(rows, face_dofs(dofmap, ta, fa)))
    assert np.all(np.isin(cols, face_dofs(dofmap, tb, fb)))
    assert not np.array_equal(rows, cols)
    with pytest.raises(MeshError, match="do not share their corners"):
        surface_cross_mass(geometry, dofmap, (ta, fa), (tb[::-1], fb[::-1]))


# --- matrices ---------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("orders", [1, 2, 3, 4, 6, "mixed"])
@pytest.mark.parametrize("name", MESHES)
def test_volume_matrices_are_the_quadrature_of_the_evaluated_functions(name, orders) -> None:
    """K = sum w G^T G and M = sum w E^T E: a second way through evaluation, on part of the mesh."""
    mesh = MESHES[name]
    geometry, dofmap = _setup(mesh, _mixed(mesh) if orders == "mixed" else orders)
    subset = np.arange(0, len(mesh.tets), 2)
    tet, bary, weights = _quadrature(geometry, 2 * dofmap.max_order + 9)
    weights = weights * np.isin(tet, subset)
    E, G = evaluate(geometry, dofmap, tet, bary), evaluate_gradient(geometry, dofmap, tet, bary)
    W = sp.diags_array(weights)
    K, M = volume_matrices(geometry, dofmap, subset)
    assert abs(M - E.T @ W @ E).max() < 1e-13 * abs(M).max()
    # 1 / det J of a curved tetrahedron is integrated approximately
    tolerance = 1e-13 if not np.any(geometry.curved) else 1e-3 * 0.2**dofmap.max_order
    assert abs(K - sum(g.T @ W @ g for g in G)).max() < max(tolerance, 1e-8) * abs(K).max()


@pytest.mark.parametrize("orders", [1, 3, "mixed"])
def test_matrices_are_real_symmetric_and_canonical(orders) -> None:
    for mesh in MESHES.values():
        geometry, dofmap = _setup(mesh, _mixed(mesh) if orders == "mixed" else orders)
        for matrix in (*volume_matrices(geometry, dofmap), surface_mass(geometry, dofmap, *_skin(dofmap))):
            assert matrix.dtype == np.float64
            assert abs(matrix - matrix.T).max() < 1e-14 * abs(matrix).max()
            assert sp.csr_matrix((matrix.data, matrix.indices, matrix.indptr)).has_canonical_format
        K, M = stiffness(geometry, dofmap), mass(geometry, dofmap)
        constant = np.zeros(dofmap.n_dofs)
        constant[dofmap.vertex_dofs] = 1.0
        assert abs(K @ constant).max() < 1e-12
        assert constant @ M @ constant == pytest.approx(_quadrature(geometry, 3)[2].sum(), rel=1e-12)


def test_regions_add_up() -> None:
    mesh = MESHES["curved"]
    geometry, dofmap = _setup(mesh, 3)
    half = np.arange(len(mesh.tets)) < 5
    parts = [volume_matrices(geometry, dofmap, np.flatnonzero(h)) for h in (half, ~half)]
    for a, b, whole in zip(*parts, volume_matrices(geometry, dofmap), strict=True):
        assert a.nnz < whole.nnz
        assert abs(a + b - whole).max() < 1e-13 * abs(whole).max()
    nothing = volume_matrices(geometry, dofmap, np.zeros(0, dtype=int))
    assert [m.nnz for m in nothing] == [0, 0]


def test_chunks_do_not_change_the_matrices(monkeypatch) -> None:
    mesh = MESHES["curved"]
    geometry, dofmap = _setup(mesh, _mixed(mesh))
    whole = (*volume_matrices(geometry, dofmap), surface_mass(geometry, dofmap, *_skin(dofmap)))
    load = surface_load(geometry, dofmap, *_skin(dofmap))
    monkeypatch.setattr("murmesh.solver.volumes._CHUNK", 500)
    monkeypatch.setattr("murmesh.solver.faces._CHUNK", 500)
    pieces = (*volume_matrices(geometry, dofmap), surface_mass(geometry, dofmap, *_skin(dofmap)))
    for a, b in zip(whole, pieces, strict=True):
        assert abs(a - b).max() < 1e-14 * abs(a).max()
    np.testing.assert_allclose(surface_load(geometry, dofmap, *_skin(dofmap)), load, atol=1e-15)


def test_straight_ten_node_tetrahedra_are_straight() -> None:
    mesh = MESHES["straight"]
    ten = quadratic(mesh)
    assert not np.any(Geometry(ten.nodes, ten.tets).curved)
    curved = Geometry(MESHES["curved"].nodes, MESHES["curved"].tets).curved
    assert 0 < curved.sum() <= len(curved)
    for a, b in zip(volume_matrices(*_setup(mesh, 3)), volume_matrices(*_setup(ten, 3)), strict=True):
        assert abs(a - b).max() == 0.0


def test_curved_quadrature_gives_the_straight_matrices_on_straight_tetrahedra() -> None:
    ten = quadratic(MESHES["straight"])
    geometry, dofmap = _setup(ten, _mixed(ten))
    expected = (*volume_matrices(geometry, dofmap), surface_mass(geometry, dofmap, *_skin(dofmap)))
    forced = Geometry(ten.nodes, ten.tets)
    forced.__dict__["curved"] = np.ones(len(ten.tets), dtype=bool)
    bent = (*volume_matrices(forced, dofmap), surface_mass(forced, dofmap, *_skin(dofmap)))
    for a, b in zip(expected, bent, strict=True):
        assert abs(a - b).max() < 1e-13 * abs(a).max()


# --- against scikit-fem -----------------------------------------------------------------------------------------------


def _skfem(mesh: TestMesh, order: int):
    skfem = pytest.importorskip("skfem")
    element = {1: skfem.ElementTetP1, 2: skfem.ElementTetP2}[order]()
    return skfem, skfem.MeshTet(mesh.nodes.T.copy(), mesh.tets.T.copy()), element


@pytest.mark.parametrize("order", [1, 2])
def test_matrices_against_scikit_fem(order) -> None:
    skfem, other, element = _skfem(UNSTRUCTURED, order)
    from skfem.models.poisson import laplace
    from skfem.models.poisson import mass as weak_mass

    space = skfem.Basis(other, element, intorder=4)
    geometry, dofmap = _setup(UNSTRUCTURED, order)
    tet, bary = geometry.locate(space.doflocs.T)
    nodal = evaluate(geometry, dofmap, tet, bary)  # values at their nodes from our coefficients
    ours, theirs = volume_matrices(geometry, dofmap), (laplace.assemble(space), weak_mass.assemble(space))
    for a, b in zip(ours, theirs, strict=True):
        assert abs(a - nodal.T @ b @ nodal).max() < 1e-13 * abs(a).max()
    np.testing.assert_allclose(
        la.eigvalsh(*(m.toarray() for m in ours)), la.eigvalsh(*(m.toarray() for m in theirs)), rtol=1e-9, atol=1e-9
    )


def test_helmholtz_against_scikit_fem() -> None:
    """(K - k^2 M + i k B) p = f with an absorbing face and an inflow, p = 2."""
    mesh = shuffled(jiggled(box(3, 2, 2)))
    skfem, other, element = _skfem(mesh, 2)
    from skfem.models.poisson import laplace, unit_load
    from skfem.models.poisson import mass as weak_mass

    k = 4.0
    space = skfem.Basis(other, element, intorder=4)
    ends = [skfem.FacetBasis(other, element, facets=other.facets_satisfying(lambda x, v=v: x[0] == v)) for v in (0, 1)]
    theirs = laplace.assemble(space) - k**2 * weak_mass.assemble(space) + 1j * k * weak_mass.assemble(ends[1])
    expected = spla.spsolve(theirs.tocsc(), unit_load.assemble(ends[0]).astype(complex))

    geometry, dofmap = _setup(mesh, 2)
    sides = [dofmap.topology.sides_of(mesh.surfaces[name]) for name in ("x0", "x1")]
    K, M = volume_matrices(geometry, dofmap)
    B = surface_mass(geometry, dofmap, sides[1][0][:, 0], sides[1][1][:, 0])
    f = surface_load(geometry, dofmap, sides[0][0][:, 0], sides[0][1][:, 0])
    found = spla.spsolve((K - k**2 * M + 1j * k * B).tocsc(), f.astype(complex))
    at = evaluate(geometry, dofmap, *geometry.locate(space.doflocs.T)) @ found
    np.testing.assert_allclose(at, expected, atol=1e-11 * abs(expected).max())


# --- faces ------------------------------------------------------------------------------------------------------------


def _skin(dofmap: DofMap) -> tuple[np.ndarray, np.ndarray]:
    return dofmap.topology.boundary_sides()


@pytest.mark.parametrize("name", MESHES)
def test_gauss_theorem_for_the_normals(name) -> None:
    """int x.n dS = 3 V and int n dS = 0: the normals point out of the tetrahedra, the area elements match."""
    mesh = MESHES[name]
    geometry, dofmap = _setup(mesh, 1)
    points, weights, normals = surface_points(geometry, *_skin(dofmap), 6)
    assert weights @ np.einsum("kd,kd->k", points, normals) == pytest.approx(3 * _quadrature(geometry, 3)[2].sum())
    assert abs(weights @ normals).max() < 1e-13
    assert surface_area(geometry, *_skin(dofmap)) == pytest.approx(weights.sum(), rel=1e-6)
    np.testing.assert_allclose(np.linalg.norm(normals, axis=1), 1.0)


def test_mean_normals() -> None:
    mesh = shuffled(box(2, 1, 1))
    geometry, dofmap = _setup(mesh, 1)
    tet, face = dofmap.topology.sides_of(mesh.surfaces["x0"])
    np.testing.assert_allclose(surface_normals(geometry, tet[:, 0], face[:, 0]), [[-1, 0, 0]] * len(tet), atol=1e-14)


@pytest.mark.parametrize("orders", [1, 2, 4, "mixed"])
@pytest.mark.parametrize("name", MESHES)
def test_surface_mass_is_the_quadrature_of_the_evaluated_functions(name, orders) -> None:
    mesh = MESHES[name]
    geometry, dofmap = _setup(mesh, _mixed(mesh) if orders == "mixed" else orders)
    tet, face = _skin(dofmap)
    points, weights, _ = surface_points(geometry, tet, face, 2 * dofmap.max_order + 12)
    on = np.repeat(tet, len(weights) // len(tet))
    E = evaluate(geometry, dofmap, on, geometry._barycentric(on, points))
    B = surface_mass(geometry, dofmap, tet, face)
    tolerance = 1e-5 if np.any(geometry.curved) else 1e-12
    assert abs(B - E.T @ sp.diags_array(weights) @ E).max() < tolerance * abs(B).max()


@pytest.mark.parametrize("orders", [1, 3, "mixed"])
def test_surface_load(orders) -> None:
    mesh = MESHES["straight"]
    geometry, dofmap = _setup(mesh, _mixed(mesh) if orders == "mixed" else orders)
    sides = dofmap.topology.sides_of(mesh.surfaces["y1"])
    tet, face = sides[0][:, 0], sides[1][:, 0]
    one = surface_load(geometry, dofmap, tet, face)
    constant = np.zeros(dofmap.n_dofs)
    constant[dofmap.vertex_dofs] = 1.0
    assert one @ constant == pytest.approx(1.0)
    np.testing.assert_allclose(surface_mass(geometry, dofmap, tet, face) @ constant, one, atol=1e-14)
    both = surface_load(geometry, dofmap, tet, face, lambda x: np.column_stack([x[:, 0] ** 2, 1j * x[:, 2]]))
    assert both.shape == (dofmap.n_dofs, 2)
    assert constant @ both == pytest.approx([1 / 3, 0.5j])
    single = surface_load(geometry, dofmap, tet, face, lambda x: x[:, 0] ** 2)
    np.testing.assert_allclose(single, both[:, 0].real, atol=1e-15)
    none = surface_load(geometry, dofmap, tet[:0], face[:0], lambda x: np.ones((len(x), 3)))
    assert none.shape == (dofmap.n_dofs, 3)
    assert not none.any()


def test_face_dofs_are_those_that_do_not_vanish() -> None:
    mesh = MESHES["straight"]
    geometry, dofmap = _setup(mesh, _mixed(mesh))
    tet, face = (v[:3] for v in _skin(dofmap))
    found = face_dofs(dofmap, tet, face)
    np.testing.assert_array_equal(found, np.flatnonzero(surface_mass(geometry, dofmap, tet, face).diagonal()))


def test_face_errors() -> None:
    geometry, dofmap = _setup(UNSTRUCTURED, 1)
    with pytest.raises(MeshError, match="leave out the sides that `sides_of` marks with -1"):
        surface_mass(geometry, dofmap, np.array([-1]), np.array([-1]))


# --- shapes -----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("order", "rate"), [(1, 2), (2, 4)])
def test_volume_and_area_of_a_ball_converge(order, rate) -> None:
    errors = []
    for n in (2, 4):
        mesh = ball(n, 0.5, order)
        geometry = Geometry(mesh.nodes, mesh.tets)
        volume = _quadrature(geometry, 3)[2].sum()
        area = surface_area(geometry, *Topology.build(mesh.tets).boundary_sides())
        errors.append([abs(volume / (np.pi / 6) - 1), abs(area / np.pi - 1)])
    rates = np.log2(np.array(errors[0]) / errors[1])
    assert np.all(abs(rates - rate) < 0.35), rates


@pytest.mark.parametrize("name", MESHES)
def test_gradients_of_the_evaluated_field(name) -> None:
    mesh = MESHES[name]
    geometry, dofmap = _setup(mesh, 4)
    rng = np.random.default_rng(0)
    field = rng.normal(size=dofmap.n_dofs)
    tet, bary = rng.integers(0, len(mesh.tets), 20), 0.1 + 0.6 * rng.dirichlet(np.ones(4), 20)
    points = geometry.map(tet, bary)
    gradients = evaluate_gradient(geometry, dofmap, tet, bary)
    for axis in range(3):
        ends = [points + s * 1e-5 * np.eye(3)[axis] for s in (1, -1)]
        high, low = (evaluate(geometry, dofmap, tet, geometry._barycentric(tet, e)) @ field for e in ends)
        np.testing.assert_allclose(gradients[axis] @ field, (high - low) / 2e-5, rtol=1e-4, atol=1e-4)


@pytest.mark.parametrize("name", MESHES)
def test_locate_returns_the_point(name) -> None:
    mesh = MESHES[name]
    geometry = Geometry(mesh.nodes, mesh.tets)
    rng = np.random.default_rng(0)
    tet = rng.integers(0, len(mesh.tets), 300)
    points = np.vstack([geometry.map(tet, rng.dirichlet(np.ones(4), 300)), mesh.nodes, mesh.centroids])
    found, bary = geometry.locate(points)
    assert np.all(found >= 0)
    assert bary.min() >= -1e-9
    np.testing.assert_allclose(bary.sum(axis=1), 1.0)
    np.testing.assert_allclose(geometry.map(found, bary), points, atol=1e-12)


def test_locate_on_a_curved_wall_and_outside_it() -> None:
    """Points between the chord and the arc belong to the curved mesh only."""
    mesh = ball(2)
    curved = Geometry(mesh.nodes, mesh.tets)
    straight = Geometry(mesh.nodes, mesh.tets[:, :4])
    direction = mesh.centroids[[3, 50, 77]] / np.linalg.norm(mesh.centroids[[3, 50, 77]], axis=1, keepdims=True)
    assert np.all(curved.locate(0.49 * direction)[0] >= 0)
    assert np.any(straight.locate(0.49 * direction)[0] < 0)
    outside, bary = curved.locate(0.51 * direction)
    assert np.all(outside == -1)
    assert np.all(np.isnan(bary))


def test_locate_in_a_graded_mesh() -> None:
    """A large tetrahedron next to hundreds of small ones: the nearest centroids are all wrong."""
    fine = np.linspace(0.0, 0.02, 8)
    mesh = grid(np.append(fine, 1.0), np.append(fine, 1.0), np.append(fine, 1.0))
    geometry = Geometry(mesh.nodes, mesh.tets)
    points = np.random.default_rng(0).uniform(0, 1, (400, 3)) ** 4
    found, bary = geometry.locate(points)
    assert np.all(found >= 0)
    np.testing.assert_allclose(geometry.map(found, bary), points, atol=1e-12)


def test_nearest_point() -> None:
    geometry = Geometry(UNSTRUCTURED.nodes, UNSTRUCTURED.tets)
    for given, expected in (
        ((0.3, 0.4, 0.5), (0.3, 0.4, 0.5)),
        ((1.4, 0.4, 0.5), (1, 0.4, 0.5)),
        ((-1, 2, 3), (0, 1, 1)),
    ):
        np.testing.assert_allclose(geometry.nearest_point(given), expected, atol=1e-12)
    round_one = Geometry(ball(2).nodes, ball(2).tets)
    assert np.linalg.norm(round_one.nearest_point((0.9, 0.3, 0.1))) == pytest.approx(0.5, rel=0.02)


def test_shape_errors() -> None:
    nodes = np.vstack([np.zeros(3), np.eye(3), [[0.3, 0.3, 0.0]]])
    with pytest.raises(MeshError, match=r"tetrahedron 1 .* has a volume of 0 m\^3 .*expected a volume \(1 such"):
        Geometry(nodes, np.array([[0, 1, 2, 3], [0, 1, 2, 4]]))
    ten = quadratic(TestMesh(nodes[:4], np.array([[0, 1, 2, 3]])))
    bent = ten.nodes.copy()
    bent[4] += [0.0, 0.6, 0.6]
    with pytest.raises(MeshError, match=r"folds over itself .*refine the mesh on curved surfaces"):
        Geometry(bent, ten.tets)


def test_order_and_point_errors() -> None:
    topology = Topology.build(UNSTRUCTURED.tets)
    with pytest.raises(MeshError, match="element order 9 of tetrahedron 0 is outside 1 to 8"):
        DofMap.build(topology, 9)
    with pytest.raises(MeshError, match="expected one each"):
        DofMap.build(topology, [1, 2])
    dofmap = DofMap.build(topology, np.arange(12) % 2 + 1)
    with pytest.raises(MeshError, match=r"orders \[1, 2\] were given together"):
        dofmap.element_dofs([0, 1])
    geometry = Geometry(UNSTRUCTURED.nodes, UNSTRUCTURED.tets)
    with pytest.raises(MeshError, match=r"1 of 2 points lie in no tetrahedron"):
        evaluate(geometry, dofmap, [0, -1], np.full((2, 4), 0.25))
    with pytest.raises(MeshError, match="expected one point per tetrahedron"):
        evaluate(geometry, dofmap, [0], np.full((2, 4), 0.25))


@pytest.mark.parametrize("order", [1, 2, 3, 5])
@pytest.mark.parametrize("bent", [False, True])
def test_rows_and_blocks_give_the_same_matrices(order: int, bent: bool, monkeypatch: pytest.MonkeyPatch) -> None:
    mesh = cylinder(2, 2) if bent else jiggled(box(2, 2, 3))
    geometry, dofmap = Geometry(mesh.nodes, mesh.tets), DofMap.build(Topology.build(mesh.tets), order)
    for subset in (None, np.arange(5, 31)):
        monkeypatch.setattr(volumes, "_CHUNK", 4000)  # several chunks
        monkeypatch.setattr(volumes, "MAX_BY_ROWS", 5)
        by_rows = volumes.volume_matrices(geometry, dofmap, subset)
        monkeypatch.setattr(volumes, "MAX_BY_ROWS", 0)
        by_blocks = volumes.volume_matrices(geometry, dofmap, subset)
        for a, b in zip(by_rows, by_blocks, strict=True):
            np.testing.assert_array_equal(a.indptr, b.indptr)
            np.testing.assert_array_equal(a.indices, b.indices)
            np.testing.assert_allclose(a.data, b.data, rtol=0, atol=1e-14 * abs(b.data).max())
