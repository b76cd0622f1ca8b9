"""Loads through a solve: conventions, shapes, scans, combinations, tones and densities, prescribed pressure, reciprocity."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from cases import RHO_C, case_of, lossy, monopole
from meshes import TestMesh, box
from murmesh.solver.case.boundary import Boundary, Impedance, Pressure, Vibrating
from murmesh.solver.case.load import (
    Combination,
    CrossSpectrum,
    Incoherent,
    LoadCase,
    SurfacePressure,
    SurfaceVelocity,
)
from murmesh.solver.case.model import Case, Receiver
from murmesh.solver.case.motion import Autospectrum, Motion, Scan, Shape, Uniform
from murmesh.solver.case.wall import Given
from murmesh.solver.contribution import participation, rank
from murmesh.solver.errors import CaseError, ResultError
from murmesh.solver.levels import third_octaves
from murmesh.solver.receiver_points import sphere_points
from murmesh.solver.result import Result
from murmesh.solver.space import discretise
from murmesh.solver.sweep import solve
from murmesh.solver.system import uncovered_area

SIZE = (0.9, 0.7, 0.6)
EAR = (0.5, 0.3, 0.4)
KINDS: dict[str, Boundary] = {"x0": Vibrating(), "z0": Vibrating()}


def _case(motions: dict[str, Motion], f: list[float] | None = None, **load: Any) -> Case:
    loads = tuple(SurfaceVelocity(name, motion) for name, motion in motions.items())
    load_case = LoadCase("run", loads, **({"spectrum": "tones"} | load))
    return case_of(box(3, 3, 2, SIZE), KINDS, load_case, f or [120.0, 300.0], {"ear": EAR}, damping=lossy(0.05), order=4)


def _pressure(result: Result) -> np.ndarray:
    return result.load_cases[0].contributions[:, 0].sum(axis=1)


def test_ways_to_say_the_same_velocity() -> None:
    reference = _pressure(solve(_case({"x0": Uniform(1e-3 + 0j)}, [120.0])))
    omega = 2 * np.pi * 120.0
    same = [
        Uniform(-1e-3 + 0j, positive="out_of_fluid"),
        Uniform(1e-3 / np.sqrt(2), amplitude="rms"),
        Uniform(1j * omega * 1e-3, measure="acceleration"),
        Shape("1", 1e-3 + 0j),
    ]
    for motion in same:
        assert np.allclose(_pressure(solve(_case({"x0": motion}, [120.0]))), reference, rtol=1e-10)


def test_a_wall_that_moves_into_the_air_compresses_it() -> None:
    """Far below the first mode p = gamma-like stiffness times volume: in phase with the displacement, not the velocity."""
    f = 5.0
    p = _pressure(solve(_case({"x0": Uniform(1e-3 + 0j)}, [f])))[0]
    displaced = 1e-3 / (2j * np.pi * f) * SIZE[1] * SIZE[2]
    stiffness = 1.21 * 343.0**2 / (np.prod(SIZE) * (1 - 0.05j))
    assert p == pytest.approx(stiffness * displaced, rel=0.02)


def test_scan_points_that_do_not_match_the_mesh() -> None:
    rng = np.random.default_rng(3)
    points = np.column_stack([np.zeros(300), *(rng.uniform(0, length, 300) for length in SIZE[1:])])
    field = np.cos(3 * points[:, 1]) * (1 + points[:, 2])
    scan = Scan(points, np.array([50.0, 400.0]), np.stack([field, field]) * (1e-3 + 0j))
    shape = Shape("cos(3*y) * (1 + z)", 1e-3 + 0j)
    found, exact = (_pressure(solve(_case({"x0": motion}))) for motion in (scan, shape))
    assert np.all(np.abs(found - exact) < 0.005 * np.abs(exact))


def test_scans_reproduce_linear_fields_and_say_what_they_miss() -> None:
    y, z = (a.ravel() for a in np.meshgrid(np.linspace(0, 0.35, 6), np.linspace(0, SIZE[2], 7)))
    points = np.column_stack([np.zeros(len(y)), y, z])
    scan = Scan(points, np.array([50.0, 400.0]), np.tile(1e-3 * (1 + 2 * y - z), (2, 1)) + 0j)
    case = _case({"x0": scan})
    uncovered = uncovered_area(discretise(case), SurfaceVelocity("x0", scan))
    assert 0.3 < uncovered / (SIZE[1] * SIZE[2]) < 0.5  # half is scanned, and a little beyond counts as covered
    linear = Shape("1 + 2*y - z", 1e-3 + 0j)
    found, exact = (_pressure(solve(_case({"x0": motion}))) for motion in (scan, linear))
    assert np.allclose(found, exact, rtol=1e-6)


MOTIONS: dict[str, Motion] = {"x0": Uniform(1e-3 + 0j), "z0": Uniform(0.4e-3 - 0.8e-3j)}


def test_incoherent_loads_add_mean_squares() -> None:
    single = [_pressure(solve(_case({name: motion}))) for name, motion in MOTIONS.items()]
    result = solve(_case(MOTIONS, combination=Incoherent()))
    assert np.allclose(result.mean_square("ear"), sum(np.abs(p) ** 2 for p in single) / 2)
    part = participation(result, "ear")
    assert np.all(part.shares >= 0) and part.closure < 1e-12
    assert result.load_cases[0].closure.max() < 1e-9


def test_cross_spectrum_relates_unit_loads() -> None:
    matrix = np.array([[2e-6, 0.5e-6 + 0.4e-6j], [0.5e-6 - 0.4e-6j, 1e-6]])
    units: dict[str, Motion] = {name: Uniform(1.0 + 0j) for name in MOTIONS}
    rule: Combination = CrossSpectrum(np.array([50.0, 400.0]), np.stack([matrix, matrix]))
    p = np.stack([_pressure(solve(_case({name: motion}))) for name, motion in units.items()], axis=1)
    expected = 0.5 * np.real(np.einsum("ij,fi,fj->f", matrix, p, p.conj()))
    result = solve(_case(units, combination=rule))
    assert np.allclose(result.mean_square("ear"), expected)
    assert np.abs(result.imbalance()).max() < 1e-8


def test_a_fully_coherent_cross_spectrum_is_the_coherent_sum() -> None:
    v = np.array([1e-3, 0.4e-3 - 0.8e-3j])
    matrix = np.outer(v, v.conj())
    units: dict[str, Motion] = {name: Uniform(1.0 + 0j) for name in MOTIONS}
    rule = CrossSpectrum(np.array([50.0, 400.0]), np.stack([matrix, matrix]))
    assert np.allclose(
        solve(_case(units, combination=rule)).mean_square("ear"), solve(_case(MOTIONS)).mean_square("ear"), rtol=1e-6
    )


def test_autospectra_per_hertz_and_band_levels() -> None:
    """v_rms^2 = 2e-8 (m/s)^2/Hz is a density; its response is Pa^2/Hz, and halving the step keeps the band level."""
    motion = Autospectrum(2e-8 + 0j, form="psd")
    levels = []
    for step in (2.0, 1.0):
        f = list(np.arange(100.0, 161.0, step))
        result = solve(_case({"x0": motion}, f, spectrum="density", combination=Incoherent()))
        ranking = rank(result, ["ear"], (third_octaves(125, 125)[0].lower, third_octaves(125, 125)[0].upper), "Z")
        levels.append(ranking.total_db)
    assert abs(levels[0] - levels[1]) < 0.05
    p = _pressure(solve(_case({"x0": Uniform(np.sqrt(4e-8) + 0j)}, [120.0])))[0]
    density = solve(_case({"x0": motion}, [120.0], spectrum="density", combination=Incoherent())).mean_square("ear")[0]
    assert density == pytest.approx(abs(p) ** 2 / 2)


def test_the_bandwidth_of_a_density() -> None:
    one = solve(_case(MOTIONS, [120.0], spectrum="density")).mean_square("ear")
    four = solve(_case(MOTIONS, [120.0], spectrum="density", bandwidth=4.0)).mean_square("ear")
    assert one == pytest.approx(4 * four)


def test_prescribed_pressure_drives_a_duct() -> None:
    """p = P cos k(L - x) / cos kL for a rigid end; with an impedance the power put in is what it takes."""
    mesh, f, pressure = box(5, 1, 1, (1.0, 0.1, 0.1)), np.array([60.0, 120.0]), 2.0 - 1.0j
    load = [SurfacePressure("x0", pressure)]
    rigid = solve(case_of(mesh, {"x0": Pressure()}, load, f, {"mid": (0.4, 0.05, 0.05)}, order=6))
    k = 2 * np.pi * f / 343.0
    assert np.allclose(_pressure(rigid), pressure * np.cos(0.6 * k) / np.cos(k), rtol=1e-6)
    kinds: dict[str, Boundary] = {"x0": Pressure(), "x1": Impedance(Given(2.0 + 1.0j))}
    lined = solve(case_of(mesh, kinds, load, f, {"end": (1.0, 0.05, 0.05), "start": (0.0, 0.05, 0.05)}, order=6))
    end, start = lined.load_cases[0].contributions[:, :, 0].T
    assert np.allclose(start, pressure)
    taken = 0.5 * np.real(1 / ((2 + 1j) * RHO_C)) * np.abs(end) ** 2 * 0.01
    assert np.allclose(lined.load_cases[0].absorbed[:, lined.power_labels.index("surface/x1")], taken, rtol=1e-9)
    assert np.abs(lined.imbalance()).max() < 1e-9


def _split_end() -> TestMesh:
    """A box whose end x0 is two surfaces, "low" and "high", that meet along a line."""
    mesh = box(3, 2, 2, SIZE)
    end = mesh.surfaces["x0"]
    low = mesh.nodes[end].mean(axis=1)[:, 1] < SIZE[1] / 2
    rest = {name: triangles for name, triangles in mesh.surfaces.items() if name != "x0"}
    return TestMesh(mesh.nodes, mesh.tets, rest | {"low": end[low], "high": end[~low]})


def test_pressures_that_meet_along_a_line() -> None:
    """Two halves at the same pressure are one surface: the line between them is not driven twice."""
    f, ear, pressure = [100.0, 250.0], {"ear": EAR}, 1.0 - 0.5j
    wall: dict[str, Boundary] = {"y1": Impedance(Given(2.0 + 1.0j))}
    whole = solve(case_of(box(3, 2, 2, SIZE), {"x0": Pressure()} | wall, [SurfacePressure("x0", pressure)], f, ear, order=4))
    loads = [SurfacePressure("low", pressure), SurfacePressure("high", pressure)]
    ends: dict[str, Boundary] = {"low": Pressure(), "high": Pressure()}
    halves = solve(case_of(_split_end(), ends | wall, loads, f, ear, order=4))
    assert np.allclose(_pressure(halves), _pressure(whole), rtol=1e-9)
    assert halves.load_cases[0].closure.max() < 1e-9
    assert np.abs(halves.imbalance()).max() < 1e-9
    assert np.allclose(halves.load_cases[0].absorbed, whole.load_cases[0].absorbed, rtol=1e-9)


def test_contributions_of_pressures_and_velocities() -> None:
    """Every contribution is that of its load alone, the others held at zero; their input is what the wall takes."""
    ends: dict[str, Boundary] = {"low": Pressure(), "high": Pressure(), "y1": Impedance(Given(2.0 + 1.0j)), "z0": Vibrating()}
    loads = [SurfacePressure("low", 1.0), SurfacePressure("high", -0.3j), SurfaceVelocity("z0", Uniform(2e-3 + 0j))]
    mesh, f, ear = _split_end(), [100.0, 250.0], {"ear": EAR}
    result = solve(case_of(mesh, ends, loads, f, ear, order=4))
    alone = [_pressure(solve(case_of(mesh, ends, [load], f, ear, order=4))) for load in loads]
    assert np.allclose(result.load_cases[0].contributions[:, 0], np.stack(alone, axis=1), rtol=1e-9)
    assert result.load_cases[0].closure.max() < 1e-9
    assert np.abs(result.imbalance()).max() < 1e-9


def test_several_load_cases_in_one_sweep() -> None:
    case = _case(MOTIONS)
    second = LoadCase("idle", (monopole((0.2, 0.2, 0.2)),), spectrum="tones")
    both = solve(case.with_(load_cases=(*case.load_cases, second)))
    alone = solve(case.with_(load_cases=(second,)))
    assert np.allclose(both.mean_square("ear", "run"), solve(case).mean_square("ear"))
    assert np.allclose(both.mean_square("ear", "idle"), alone.mean_square("ear"))
    assert both.load_case().name == "run"
    with pytest.raises(ResultError, match="has no load case 'idel'; did you mean 'idle'"):
        both.load_case("idel")
    with pytest.raises(ResultError, match="has no receiver 'eat'; did you mean 'ear'"):
        both.receiver("eat")


def test_reciprocity() -> None:
    a, b = (0.2, 0.25, 0.15), (0.71, 0.5, 0.44)
    mesh = box(3, 3, 2, SIZE)
    kinds: dict[str, Boundary] = {"y1": Impedance(Given(3.0 - 2.0j))}
    pressures = [
        _pressure(solve(case_of(mesh, kinds, [monopole(here)], [200.0], {"r": there}, order=4)))[0]
        for here, there in ((a, b), (b, a))
    ]
    assert pressures[0] == pytest.approx(pressures[1], rel=1e-9)


def test_places_outside_name_the_nearest_point() -> None:
    case = _case(MOTIONS)
    outside = case.with_(receivers=(Receiver("ear", (0.5, 0.3, 0.9)),))
    with pytest.raises(CaseError, match=r"'ear' lies outside every region .* nearest point of the fluid is \(0.5, 0.3, 0.6\)"):
        solve(outside)
    with pytest.raises(CaseError, match=r"with its averaging sphere of 0.3 m reaches outside"):
        solve(case.with_(receivers=(Receiver("ear", (0.5, 0.3, 0.4), 0.3),)))
    source = LoadCase("run", (monopole((0.5, 0.3, 0.9)),), spectrum="tones")
    with pytest.raises(CaseError, match=r"the source 'source' at .* lies outside every region"):
        solve(case.with_(load_cases=(source,)))


def test_averaging_sphere_is_the_mean_over_the_ball() -> None:
    """The mean square over a small ball, against a fine lattice of points in it."""
    radius = 0.08
    lattice = np.stack(np.meshgrid(*[np.linspace(-1, 1, 13)] * 3), axis=-1).reshape(-1, 3)
    inside = np.array(EAR) + radius * lattice[np.linalg.norm(lattice, axis=1) <= 1]
    case = _case(MOTIONS, [300.0]).with_(receivers=(Receiver("ear", EAR, radius), Receiver("point", EAR)))
    result = solve(case.with_(sweep=case.sweep.with_(field_frequencies=np.array([300.0]))))
    mean = np.mean(0.5 * np.abs(result.pressure_at(inside, 300.0)[:, 0]) ** 2)
    assert result.mean_square("ear")[0] == pytest.approx(mean, rel=0.01)
    assert abs(result.mean_square("point")[0] / mean - 1) > 0.01
    assert np.isnan(result.pressure_at(np.array([[9.0, 0, 0]]), 300.0)).all()


def test_averaging_sphere_is_exact_for_cubic_functions() -> None:
    """Means over a ball of radius a about c: of x its c_x, of x^2 c_x^2 + a^2/5, of x^2 y (c_x^2 + a^2/5) c_y."""
    points, weights = sphere_points(Receiver("ear", EAR, 0.1))
    x, y, z = points.T
    spread = EAR[0] ** 2 + 0.1**2 / 5
    assert weights.sum() == pytest.approx(1.0)
    for values, mean in (
        (x, EAR[0]), (x**2, spread), (x * y, EAR[0] * EAR[1]), (x**2 * y, spread * EAR[1]),
        (z**3, EAR[2] ** 3 + 3 * EAR[2] * 0.1**2 / 5),
    ):  # fmt: skip
        assert weights @ values == pytest.approx(mean, rel=1e-12)
    assert abs(weights @ x**4 - (EAR[0] ** 4 + 6 * EAR[0] ** 2 * 0.1**2 / 5 + 3 * 0.1**4 / 35)) > 1e-6
    alone, one = sphere_points(Receiver("ear", EAR))
    assert np.array_equal(alone, [EAR]) and np.array_equal(one, [1.0])


@pytest.mark.parametrize(("form", "value"), [("peak", 2e-3), ("rms", np.sqrt(2) * 1e-3)])
def test_autospectra_as_amplitudes(form: str, value: float) -> None:
    motion = Autospectrum(value + 0j, form=form)
    found = solve(_case({"x0": motion}, [120.0], combination=Incoherent())).mean_square("ear")
    assert found == pytest.approx(np.abs(_pressure(solve(_case({"x0": Uniform(2e-3 + 0j)}, [120.0])))) ** 2 / 2)


def test_scans_say_what_was_measured() -> None:
    """An rms acceleration out of the fluid at scan points, interpolated over frequency, against the same velocity."""
    y, z = (a.ravel() for a in np.meshgrid(np.linspace(0, SIZE[1], 4), np.linspace(0, SIZE[2], 4)))
    points = np.column_stack([np.zeros(len(y)), y, z])
    values = np.outer([1.0, 3.0], np.ones(len(points))) * 1j
    scan = Scan(points, np.array([100.0, 300.0]), values, "acceleration", "rms", "out_of_fluid")
    velocity = -2.0j * np.sqrt(2) / (2j * np.pi * 200.0)
    found, exact = (_pressure(solve(_case({"x0": motion}, [200.0]))) for motion in (scan, Uniform(velocity)))
    assert np.allclose(found, exact, rtol=1e-6)


def test_a_single_source_leaves_silence() -> None:
    ranking = rank(solve(_case({"x0": Uniform(1e-3 + 0j)})), ["ear"])
    assert ranking.rows[0].share == pytest.approx(1.0) and ranking.rows[0].removal_db == -np.inf


def test_rankings_that_cannot_be_made() -> None:
    result = solve(_case(MOTIONS))
    with pytest.raises(ResultError, match="no energy between 130 and 200 Hz"):
        rank(result, ["ear"], (130.0, 200.0))
    with pytest.raises(ResultError, match="is empty; give lower < upper"):
        rank(result, ["ear"], (200.0, 130.0))
    with pytest.raises(ResultError, match="no receiver, so nothing can be ranked"):
        rank(solve(_case(MOTIONS).with_(receivers=())), [])
    with pytest.raises(ResultError, match=r"no field is kept at 120 Hz \(kept: none Hz\)"):
        result.field(120.0)
