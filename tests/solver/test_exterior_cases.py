"""Whole cases that radiate: levels inside and outside, radiated power, sweeps, ground planes, refusals."""

from __future__ import annotations

import numpy as np
import pytest

import meshes
from cases import RHO_C, case_of
from murmesh.solver.case.boundary import Pressure, Radiating, Rigid, Vibrating
from murmesh.solver.case.load import IncidentField, Monopole, OutsideMonopole, PlaneWave, SurfaceVelocity
from murmesh.solver.case.model import Case
from murmesh.solver.case.motion import Uniform
from murmesh.solver.errors import CaseError, FieldError, MeshError
from murmesh.solver.result import Result, read_result, write_result
from murmesh.solver.sweep import solve
from reading import read_csv_reference, read_json_reference

RADIUS, SPEED = 0.25, 0.01
PULSATING = [SurfaceVelocity("inner", Uniform(SPEED + 0j))]
POINTS = {"near": (0.0, 0.0, 0.28), "half": (0.5, 0.0, 0.0), "far": (0.0, 0.6, 0.8)}


def pulsating(frequencies: np.ndarray, order: int = 3, **sweep: object) -> Case:
    """A pulsating sphere of B01's size in a thin layer of air."""
    mesh = meshes.shell(2, (RADIUS, 0.3))
    kinds = {"inner": Vibrating(), "outer": Radiating()}
    return case_of(mesh, kinds, PULSATING, frequencies, POINTS, order=order, **sweep)


def exact(f: np.ndarray, r: float) -> np.ndarray:
    """p = i rho c U ka / (1 + i ka) (a / r) e^{-ik(r - a)} (Pierce, Acoustics, ch. 4)."""
    k = 2 * np.pi * f / 343.0
    ka = k * RADIUS
    return np.asarray(1j * RHO_C * SPEED * ka / (1 + 1j * ka) * RADIUS / r * np.exp(-1j * k * (r - RADIUS)))


@pytest.fixture(scope="module")
def reduced() -> Result:
    return solve(pulsating(np.linspace(100.0, 500.0, 81)), method="reduced")


def test_a_pulsating_sphere_is_heard_inside_and_outside() -> None:
    """B01 at ka = 1 and 2 and receivers in the layer, at 2a and at 4a; the coarse geometry alone is worth 0.1 dB."""
    table = read_csv_reference("B01_B02_pulsating_oscillating_sphere.csv")
    for ka in (1.0, 2.0):
        at = [int(np.flatnonzero((table["ka"] == ka) & (table["r_m"] == r))[0]) for r in (0.5, 1.0)]
        f = table["f_Hz"][at[:1]]
        published = table["pulsating_re"][at] + 1j * table["pulsating_im"][at]
        p = solve(pulsating(f)).load_cases[0].contributions[0, :, 0]
        ratio = p / np.concatenate([exact(f, 0.28), published])
        assert np.abs(20 * np.log10(np.abs(ratio))).max() < 0.15
        assert np.abs(np.angle(ratio)).max() < 0.02


def test_what_is_put_in_is_radiated(reduced: Result) -> None:
    assert reduced.power_labels == ("volume/air", "radiated/outer")
    held = reduced.load_cases[0]
    assert np.abs(reduced.imbalance()).max() < 1e-9
    assert np.allclose(held.absorbed[:, 1], held.supplied[:, 0])
    outside = reduced.outside(300.0)[0]
    line = int(np.argmin(np.abs(reduced.frequencies - 300.0)))
    assert outside.power == pytest.approx(held.absorbed[line, 1], rel=1e-6)
    assert outside.far_power == pytest.approx(outside.power, rel=1e-4)
    assert np.abs(outside.directivity_index(np.eye(3))).max() < 0.05


def test_a_reduced_sweep_of_the_outside_is_certified(reduced: Result) -> None:
    """Unsymmetric, with receivers outside: within 0.01 dB of the direct lines, from at most eight factorised ones."""
    certificate = reduced.certificate
    assert certificate is not None and certificate.certified and certificate.factorisations <= 8
    some = reduced.frequencies[::20]
    direct = solve(pulsating(some), method="direct").load_cases[0].contributions
    ratio = reduced.load_cases[0].contributions[::20] / direct
    assert np.abs(20 * np.log10(np.abs(ratio))).max() < 0.01


def test_fields_go_on_outside(reduced: Result) -> None:
    """Any frequency of the band, any point: the mesh inside, the surface's integral outside, nothing in the body."""
    p = reduced.pressure_at(np.array([POINTS["near"], POINTS["far"], (0.0, 0.1, 0.0)]), 333.0)[:, 0]
    f = np.array([333.0])
    assert abs(20 * np.log10(abs(p[0] / exact(f, 0.28)[0]))) < 0.15
    assert abs(20 * np.log10(abs(p[1] / exact(f, 1.0)[0]))) < 0.15
    assert np.isnan(p[2])
    assert len(reduced.field(333.0)) == reduced.space.dofs.n_dofs < len(reduced.unknowns(333.0))


def test_results_that_radiate_are_read_back(reduced: Result, tmp_path: object) -> None:
    path = f"{tmp_path}/result.h5"
    write_result(reduced, path)
    again = read_result(path)
    assert again.case.checksum == reduced.case.checksum
    assert again.outside(333.0)[0].power == pytest.approx(reduced.outside(333.0)[0].power, rel=1e-9)


def test_errors_of_the_mesh_are_estimated_outside_too() -> None:
    held = solve(pulsating(np.array([400.0]), order=2)).load_cases[0]
    finer = solve(pulsating(np.array([400.0]), order=3)).load_cases[0]
    assert np.allclose(held.contributions[..., 0] + held.mesh_error[..., 0], finer.contributions[..., 0], rtol=2e-3)


def baffled(**ground: object) -> Case:
    """A piston of 0.1 m in a rigid floor under a dome of air."""
    mesh = meshes.dome(3, (0.0, 0.05, 0.1, 0.15))
    kinds = {"disc_0": Vibrating(), "disc_1": Vibrating(), "disc_2": Rigid(), "outer": Radiating(**ground)}
    loads = [SurfaceVelocity(name, Uniform(SPEED + 0j)) for name in ("disc_0", "disc_1")]
    return case_of(mesh, kinds, loads, [545.901454805201], {"axis": (0.0, 0.0, 0.3), "side": (0.3, 0.0, 0.02)}, order=4)


def test_a_baffled_piston() -> None:
    """B05, B05b, B05c at ka = 1: on and off the axis, radiated power; 1 %."""
    result = solve(baffled(ground="rigid"))
    p = result.load_cases[0].contributions[0].sum(axis=1)
    on = read_csv_reference("B05_baffled_piston_on_axis.csv")
    off = read_csv_reference("B05c_baffled_piston_offaxis.csv")
    i = int(np.flatnonzero((on["ka"] == 1.0) & (on["z_m"] == 0.3))[0])
    j = int(np.flatnonzero((off["ka"] == 1.0) & (off["r_m"] == 0.3))[0])
    published = np.array([on["p_re"][i] + 1j * on["p_im"][i], off["p_re"][j] + 1j * off["p_im"][j]])
    assert np.abs(p / published - 1.0).max() < 0.01
    powers = read_csv_reference("B05b_piston_radiation_impedance.csv")
    watt = powers["W_Watt_a0.1_U0.01"][powers["ka"] == 1.0][0]
    assert result.load_cases[0].absorbed[0, -1] == pytest.approx(watt, rel=0.01)


def test_an_open_dome_is_refused_by_its_name() -> None:
    with pytest.raises(MeshError, match=r"surfaces/outer: .*open along .* edges.*ground plane"):
        solve(baffled())


def test_receivers_in_the_body_and_under_the_ground_are_refused() -> None:
    for at in ((0.0, 0.0, -0.2), (0.0, 0.0, -2.0)):
        case = baffled(ground="rigid")
        with pytest.raises(CaseError, match="receiver 'low' lies outside every region"):
            solve(case.with_(receivers=(type(case.receivers[0])("low", at),)))


def test_a_ground_without_normal_is_refused() -> None:
    with pytest.raises(FieldError, match="normal is \\(0, 0, 0\\)"):
        Radiating(ground="rigid", ground_normal=(0.0, 0.0, 0.0))


def test_the_cross_section_of_a_rigid_sphere() -> None:
    """B04: scattered power over the intensity of the wave, in units of pi a^2, from the far field of what is added; 1 %."""
    a = 0.25
    for case in [c for c in read_json_reference("B04_rigid_sphere_scattering.json")["cases"] if c["ka"] <= 2.0]:
        f = case["ka"] / a * 343.0 / (2 * np.pi)
        mesh, wave = meshes.shell(3, (a, 0.3)), PlaneWave("wave", (0.0, 0.0, 2.0), 1.0 + 0j)
        result = solve(case_of(mesh, {"outer": Radiating()}, [wave], [f], {}, order=4, field_frequencies=np.array([f])))
        [outside] = result.outside(f)
        incident = 1.0 / (2 * RHO_C)
        for power in (outside.power, outside.far_power):
            assert power / incident / (np.pi * a**2) == pytest.approx(case["Q_scat"], rel=0.01)
        angle = np.radians([row["theta_deg"] for row in case["form_function_abs"]])
        forms = np.abs(outside.far_field(np.stack([np.sin(angle), 0 * angle, np.cos(angle)], axis=1))[:, 0]) / (a / 2)
        assert np.abs(forms - [row["form"] for row in case["form_function_abs"]]).max() < 0.01


def test_a_wave_around_a_rigid_sphere() -> None:
    """B04 at ka = 1 and 2: total pressure outside, within 1 % of the wave."""
    a = 0.25
    for case in [c for c in read_json_reference("B04_rigid_sphere_scattering.json")["cases"] if c["ka"] <= 2.0]:
        places = [row for row in case["field"] if row["r_over_a"] > 1.0][::2]
        angle = np.radians([row["theta_deg"] for row in places])
        r = a * np.array([row["r_over_a"] for row in places])
        points = {f"p{i}": (r[i] * np.sin(t), 0.0, r[i] * np.cos(t)) for i, t in enumerate(angle)}
        wave = PlaneWave("wave", (0.0, 0.0, 2.0), 1.0 + 0j)
        mesh = meshes.shell(2, (a, 0.3))
        f = [case["ka"] / a * 343.0 / (2 * np.pi)]
        result = solve(case_of(mesh, {"outer": Radiating()}, [wave], f, points, order=4))
        published = np.array([complex(*row["p_total"]) for row in places])
        found = result.load_cases[0].contributions[0, :, 0]
        assert np.abs(found - published).max() < 0.01
        assert result.load_cases[0].closure.max() < 1e-9
        assert np.abs(result.imbalance()).max() < 1e-6 or abs(result.load_cases[0].supplied.sum()) < 1e-9


WAVES = [
    PlaneWave("wave", (1.0, 0.5, -2.0), 2.0 + 1.0j, (0.1, 0.0, 0.3)),
    OutsideMonopole("distant", (0.4, 0.2, 0.5), 1e-3 + 0j),
]


@pytest.mark.parametrize("ground", ["none", "rigid", "pressure_release"])
@pytest.mark.parametrize("wave", WAVES, ids=lambda w: w.kind_name)
def test_where_nothing_is_in_its_way_a_field_from_outside_stays_itself(wave: IncidentField, ground: str) -> None:
    """In a ball, or a dome with the reflection by its ground: inside and outside, over a band by the reduced model."""
    mesh = meshes.ball(1, 0.2) if ground == "none" else meshes.dome(2, (0.0, 0.1, 0.2))
    outer = "sphere" if ground == "none" else "outer"
    floor = Pressure() if ground == "pressure_release" else Rigid()
    kinds = {name: Radiating(ground=ground) if name == outer else floor for name in mesh.surfaces}
    points = {"inside": (0.02, 0.05, 0.1), "outside": (0.1, -0.1, 0.4)}
    f = np.linspace(200.0, 600.0, 3)
    result = solve(case_of(mesh, kinds, [wave], f, points, order=5, field_frequencies=f))
    x, sign = np.array(list(points.values())), {"none": 0.0, "rigid": 1.0, "pressure_release": -1.0}[ground]
    exact = []
    for each in f:
        k = 2 * np.pi * each / 343.0
        scale = wave.amplitude(np.array([each]), np.array([1.21 + 0j]))[0]
        exact.append(scale * (wave.shape(x, k)[0] + sign * wave.shape(x * [1, 1, -1], k)[0]))
    found = result.load_cases[0].contributions[..., 0]
    assert np.abs(found - exact).max() < 5e-3 * np.abs(exact).max()
    last = result.pressure_at(x, float(f[-1]))[:, 0]
    assert np.abs(last - exact[-1]).max() < 5e-3 * np.abs(exact).max()
    [outside] = result.outside(float(f[-1]))  # nothing is scattered
    assert abs(outside.power) < 1e-4 * np.abs(exact).max() ** 2 / RHO_C


def test_sources_from_outside_are_declared_and_lie_outside() -> None:
    mesh, kinds = meshes.ball(1, 0.2), {"sphere": Radiating()}
    place = {"in": (0.0, 0.0, 0.1)}
    with pytest.raises(CaseError, match=r"does not lie beyond 'sphere'.*make it a 'monopole'"):
        solve(case_of(mesh, kinds, [OutsideMonopole("s", (0.0, 0.0, 0.1), 1e-3)], [200.0], place, order=2))
    with pytest.raises(CaseError, match="a source beyond a surface that radiates is an 'outside_monopole'"):
        solve(case_of(mesh, kinds, [Monopole("s", (0.0, 0.0, 0.5), 1e-3)], [200.0], place, order=2))
    with pytest.raises(CaseError, match=r"needs one surface of kind 'radiating'.* has 0"):
        solve(case_of(mesh, {}, [WAVES[0]], [200.0], place, order=2))


def test_direct_lines_of_a_wide_band_keep_the_unknowns_outside() -> None:
    """Orders by the rule would give the low lines a sub-band of their own; the unknowns outside are no selection of a map."""
    f = np.array([20.0, 40.0, 80.0, 700.0])
    case = pulsating(f, order=0, accuracy=1.0, error_bar=False, field_frequencies=np.array([20.0]))
    result = solve(case, method="direct")
    p = result.load_cases[0].contributions[:, 0, 0]
    assert np.abs(20 * np.log10(np.abs(p / exact(f, 0.28)))).max() < 0.3
    assert result.field(20.0).shape[0] == result.space.dofs.n_dofs


def test_fields_of_many_points_are_those_of_the_rows(reduced: Result) -> None:
    """Near and far from the surface, in single precision and some points at a time; which points lie outside is told alike."""
    outer = reduced.outside(400.0)[0]
    u = np.random.default_rng(7).normal(size=(400, 3))
    points = u / np.linalg.norm(u, axis=1, keepdims=True) * np.geomspace(0.2, 3.0, 400)[:, None]
    beyond = outer.exterior.beyond(points)
    assert not beyond[:45].any() and beyond[np.linalg.norm(points, axis=1) > 0.301].all()
    far = points[np.linalg.norm(points, axis=1) > 0.32]
    rows = outer.exterior.pressure_rows(far, outer.k) @ outer.field
    assert np.abs(outer.pressure(far) / rows - 1.0).max() < 1e-4
