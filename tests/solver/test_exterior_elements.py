"""Infinite elements: exact radially, well conditioned, on spheres, spheroids and domes; what is refused."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sp
from exterior_shells import Shell, hankel
from scipy.special import eval_legendre

import meshes
from murmesh.solver.assembly import DofMap, Geometry
from murmesh.solver.elements.infinite import radial_functions, scaled_condition, sphere_radial_matrix
from murmesh.solver.envelope import Envelope, Ground, automatic_radial, envelope
from murmesh.solver.errors import MeshError
from murmesh.solver.exterior import Band, sphere_rule
from murmesh.solver.topology import Topology
from reading import read_csv_reference


def rows(name: str) -> list[dict[str, str]]:
    """The rows of a reference, entries as text."""
    columns = read_csv_reference(name)
    return [
        {key: str(value) for key, value in zip(columns, entry, strict=True)} for entry in zip(*columns.values(), strict=True)
    ]


I01 = rows("I01_infinite_element_radial_exactness.csv")
B01B = rows("B01b_sphere_modal_radiation_impedance.csv")


@pytest.mark.parametrize("row", [r for r in I01 if float(r["m"]) <= 8], ids=lambda r: f"{r['n']}-{r['ka']}-{r['m']}")
def test_radial_functions_reach_the_published_errors(row: dict[str, str]) -> None:
    """I01: relative error of the impedance of one spherical harmonic; none from m = n + 1 functions on."""
    n, ka, count = int(float(row["n"])), float(row["ka"]), int(float(row["m"]))
    h, dh = hankel(n, ka)
    unit = np.zeros(count)
    unit[0] = -1.0
    found = np.linalg.solve(sphere_radial_matrix(count, n, ka), unit)[0] * ka * dh / h
    assert abs(found - 1.0) == pytest.approx(float(row["rel_error"]), rel=1e-3, abs=1e-9)


def test_jacobi_functions_keep_the_condition_number_low() -> None:
    """I02's case (n = 4, ka = 10): monomials 1.5e10 at eight functions, shifted Legendre 1.3e3; these below 80."""
    published = {
        r["basis"]: float(r["cond"]) for r in rows("I02_infinite_element_condition_numbers.csv") if float(r["m"]) == 8
    }
    assert published["monomial"] > 1e9
    for count in (4, 8, 12, 20):
        assert float(scaled_condition(sphere_radial_matrix(count, 4, 10.0))) < 80.0


def test_only_the_first_radial_function_lives_on_the_surface() -> None:
    values, _ = radial_functions(6, np.array([1.0]))
    assert np.allclose(values, [[1.0, 0, 0, 0, 0, 0]])


def test_slopes_of_radial_functions() -> None:
    t, step = np.linspace(0.1, 0.9, 5), 1e-6
    numeric = (radial_functions(7, t + step)[0] - radial_functions(7, t - step)[0]) / (2 * step)
    assert np.allclose(radial_functions(7, t)[1], numeric, atol=1e-7)


@pytest.fixture(scope="module")
def sphere() -> Shell:
    return Shell(meshes.shell(2, (1.0, 1.1)), 4)


@pytest.mark.parametrize("ka", ["1.0", "5.0"])
@pytest.mark.parametrize("n", [0, 1, 2])
def test_modal_impedance_of_a_sphere(sphere: Shell, ka: str, n: int) -> None:
    """B01b on a coarse shell whose quadratic geometry is 2 % of a radius off the resolved one: 0.25 dB here."""
    row = next(r for r in B01B if r["ka"] == ka)
    exact = complex(float(row[f"n{n}_res"]), float(row[f"n{n}_react"]))
    harmonic = sphere.load("inner", lambda x: eval_legendre(n, x[:, 2] / np.maximum(np.linalg.norm(x, axis=1), 1e-9)))
    u = sphere.solve(float(ka), 1j * float(ka) * harmonic)
    found = harmonic @ u * (2 * n + 1) / (4 * np.pi)
    assert abs(20 * np.log10(abs(found / exact))) < 0.25
    assert found.imag > 0


def test_outside_and_far_field_are_those_of_the_surface(sphere: Shell) -> None:
    """A pulsating sphere by itself: p r e^{ikr} is the same everywhere, and both powers agree."""
    k = 2.0
    u = sphere.solve(k, 1j * k * sphere.load("inner"))
    points = np.array([[0, 0, 1.3], [3.0, 0, 1.0], [-10.0, 20.0, 5.0]])
    r = np.linalg.norm(points, axis=1)
    strength = sphere.outside.pressure_rows(points, k) @ u * r * np.exp(1j * k * r)
    far = sphere.outside.far_rows(np.array([[0, 0, 1.0], [1.0, 2.0, 3.0]]), k) @ u
    assert np.allclose(np.concatenate([strength, far]), far[0], rtol=3e-3)
    surface, distant = sphere.outside.surface_power(u, k, k), sphere.outside.far_power(u, k, 1.0)
    assert surface == pytest.approx(distant, rel=2e-5)
    assert surface == pytest.approx(float(np.real(np.conj(sphere.load("inner") @ u)) / 2), rel=1e-9)


def test_condition_numbers_are_low() -> None:
    """Below 1e3 on a sphere and 5e3 on a 3:1 spheroid."""
    round_one = Shell(meshes.shell(2, (1.0, 1.1)), 4).envelope
    slender = Shell(meshes.shell(2, (1.0, 1.1), (1 / 3, 1 / 3, 1.0)), 4).envelope
    assert max(round_one.condition(k) for k in (1.0, 10.0, 20.0)) < 1e3
    assert max(slender.condition(k) for k in (1.0, 10.0, 20.0)) < 5e3


@pytest.mark.parametrize("sign", [1, -1], ids=["rigid", "pressure_release"])
def test_a_dome_on_the_ground_is_half_of_a_sphere(sphere: Shell, sign: int) -> None:
    """The field of a body that is even (odd) about the plane is that of its half on a rigid (pressure-release) ground."""
    k = 2.0
    value = (lambda x: np.ones(len(x))) if sign > 0 else (lambda x: x[:, 2])
    half = Shell(meshes.shell(2, (1.0, 1.1), half=True), 4, ground=Ground.of((0, 0, 2), sign))
    u, v = (shell.solve(k, 1j * k * shell.load("inner", value)) for shell in (sphere, half))
    points = np.array([[0, 0, 1.5], [2.0, 1.0, 0.4]])
    whole, part = (s.outside.pressure_rows(points, k) @ w for s, w in ((sphere, u), (half, v)))
    assert np.allclose(part, whole, rtol=1e-4)
    powers = [s.outside.far_power(w, k, 1.0) for s, w in ((sphere, u), (half, v))]
    assert powers[1] == pytest.approx(0.5 * powers[0], rel=1e-4)


def test_rays_that_graze_the_surface_are_refused() -> None:
    mesh = meshes.box(2, 2, 2, (1.0, 1.0, 1.0))
    with pytest.raises(MeshError, match=r"not star-shaped about \(3, 0.5, 0.5\).*give a centre"):
        _envelope(mesh, centre=(3.0, 0.5, 0.5))


def test_a_centre_on_the_surface_is_refused() -> None:
    with pytest.raises(MeshError, match=r"centre \(1, 0.5, 0.5\) m lies on the surface.*another centre"):
        _envelope(meshes.box(2, 2, 2, (1.0, 1.0, 1.0)), centre=(1.0, 0.5, 0.5))


def test_an_open_surface_is_refused() -> None:
    with pytest.raises(MeshError, match=r"open along 8 edges, one at .*add the missing surfaces"):
        _envelope(meshes.box(2, 2, 2, (1.0, 1.0, 1.0)), leave_out="z0")


@pytest.mark.parametrize(
    ("centre", "normal", "words"),
    [
        ((0.5, 0.5, 0.2), (0, 0, 1), "0.2 m off the plane; put the centre"),
        ((0.5, 0.5, 0.0), (0, 0, -1), "turn the normal round"),
        ((0.5, 0.5, 0.0), (1, 0, 1), "off the plane"),
    ],
)
def test_ground_planes_off_the_rim_are_refused(centre: tuple[float, ...], normal: tuple[float, ...], words: str) -> None:
    with pytest.raises(MeshError, match=words):
        _envelope(meshes.box(2, 2, 2, (1.0, 1.0, 1.0)), leave_out="z0", centre=centre, ground=Ground.of(normal, 1))


def test_a_closed_surface_needs_no_ground() -> None:
    with pytest.raises(MeshError, match="is closed, but a ground plane is given"):
        _envelope(meshes.box(2, 2, 2, (1.0, 1.0, 1.0)), ground=Ground.of((0, 0, 1), 1))


def test_a_dome_finds_its_centre_on_the_ground() -> None:
    found = _envelope(meshes.box(2, 2, 2, (1.0, 1.0, 1.0)), leave_out="z0", ground=Ground.of((0, 0, 1), 1))
    assert np.allclose(found.centre, (0.5, 0.5, 0.0))


def _envelope(mesh: meshes.TestMesh, leave_out: str = "", **options: object) -> Envelope:
    topology = Topology.build(mesh.tets)
    triangles = np.concatenate([t for name, t in mesh.surfaces.items() if name != leave_out])
    tet, face = topology.sides_of(triangles)
    return envelope(Geometry(mesh.nodes, mesh.tets), DofMap.build(topology, 2), (tet[:, 0], face[:, 0]), **options)


def test_radial_functions_follow_the_size() -> None:
    assert (automatic_radial(3.0), automatic_radial(10.0), automatic_radial(10.1)) == (8, 8, 10)


def test_polynomials_over_a_band_follow_waves() -> None:
    band = Band.of(1.0, 21.0, 2.0)
    k = np.array([1.0, 7.7, 13.0 - 0.2j, 21.0])
    for y in (-2.0, 0.3, 2.0):
        assert np.allclose(band.weights(k) @ np.exp(1j * band.nodes * y), np.exp(1j * k * y), atol=1e-9)
    assert np.allclose(Band.of(5.0, 5.0, 1.0).weights(np.array([5.0])) @ np.exp(1j * Band.of(5.0, 5.0, 1.0).nodes), np.exp(5j))


def test_directions_integrate_spherical_harmonics() -> None:
    d, w = sphere_rule(5)
    assert w.sum() == pytest.approx(4 * np.pi)
    assert np.sum(w * eval_legendre(4, d[:, 2]) ** 2) == pytest.approx(4 * np.pi / 9)
    assert np.allclose(np.linalg.norm(d, axis=1), 1.0)


def test_matrices_take_mixed_orders() -> None:
    """Columns of a lower order stand in the higher one's matrices: the traces are hierarchic."""
    mesh = meshes.shell(1, (1.0, 1.2))
    topology, geometry = Topology.build(mesh.tets), Geometry(mesh.nodes, mesh.tets)
    orders = np.where(np.arange(len(mesh.tets)) % 3 == 0, 2, 3)
    low, high = DofMap.build(topology, orders), DofMap.build(topology, 4)
    tet, face = topology.sides_of(mesh.surfaces["outer"])
    two = [envelope(geometry, dofs, (tet[:, 0], face[:, 0]), radial=3) for dofs in (low, high)]
    at = np.searchsorted(two[1].trace, high.selection_of(low)[two[0].trace])
    sizes = [e.dofs.n_dofs + e.extra for e in two]
    for a, b in zip(two[0].matrices(sizes[0]), two[1].matrices(sizes[1]), strict=True):
        small, large = two[0].numbers.ravel(), two[1].numbers[at].ravel()
        assert sp.linalg.norm(a[small][:, small] - b[large][:, large]) < 1e-3 * sp.linalg.norm(a)
