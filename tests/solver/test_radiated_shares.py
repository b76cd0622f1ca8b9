"""What single loads radiate, against exact values and against direct lines; what of it the file and the journal keep."""

from __future__ import annotations

from dataclasses import replace
from functools import cache
from pathlib import Path

import h5py
import numpy as np
import pytest

import meshes
from cases import RHO_C, case_of
from murmesh.solver.case.boundary import Radiating, Vibrating
from murmesh.solver.case.load import CrossSpectrum, LoadCase, SurfaceVelocity
from murmesh.solver.case.motion import Uniform
from murmesh.solver.contribution import participation, rank
from murmesh.solver.errors import FormatError, ResultError
from murmesh.solver.radiation import PER_WATT, RADIATED, THROUGH, mean_square
from murmesh.solver.result import Result, read_result, write_result
from murmesh.solver.sweep import solve
from reading import read_csv_reference

RADIUS, SPEED = 0.25, 0.01
FAR = {"far": (0.1, 0.0, 0.9)}


def _panels(n: int, axes: tuple[int, ...]) -> meshes.TestMesh:
    """A layer of air around a sphere that is cut by the planes across some axes into panels p0, p1, ..."""
    mesh = meshes.shell(n, (RADIUS, 0.3))
    inner = mesh.surfaces["inner"]
    middle = mesh.nodes[inner[:, :3]].mean(axis=1)
    number = (middle[:, list(axes)] > 0) @ (2 ** np.arange(len(axes)))
    panels = {f"p{i}": inner[number == i] for i in range(2 ** len(axes))}
    return replace(mesh, surfaces={**panels, "outer": mesh.surfaces["outer"]})


def _solved(mesh: meshes.TestMesh, loads: LoadCase | list[SurfaceVelocity], f: np.ndarray, method: str = "direct") -> Result:
    kinds = {name: Radiating() if name.startswith("outer") else Vibrating() for name in mesh.surfaces}
    return solve(case_of(mesh, kinds, loads, f, FAR, order=3), method=method)


def _loads(*speeds: complex) -> list[SurfaceVelocity]:
    return [SurfaceVelocity(f"p{i}", Uniform(complex(speed))) for i, speed in enumerate(speeds)]


def test_two_halves_of_a_sphere() -> None:
    """P_ij = 2 pi a^2 rho c sum_n U_n^i conj(U_n^j) Re z_n / (2 n + 1), z_n the modal impedances of B01b; a half that moves
    with U has U_0 = U/2, U_1 = 3 U/4, U_3 = -7 U/16 (from int_0^1 P_n dx; odd n change sign for the other half)."""
    table = read_csv_reference("B01b_sphere_modal_radiation_impedance.csv")
    result = _solved(_panels(3, (2,)), _loads(SPEED, SPEED), np.array([343.0 / (2 * np.pi * RADIUS)]))
    row = int(np.flatnonzero(table["ka"] == 1.0)[0])
    each = np.array([u**2 * table[f"n{n}_res"][row] / (2 * n + 1) for n, u in ((0, 1 / 2), (1, 3 / 4), (3, 7 / 16))])
    scale = 2 * np.pi * RADIUS**2 * RHO_C * SPEED**2
    own, cross = scale * each.sum(), scale * (each * [1, -1, -1]).sum()
    found = result.load_cases[0].radiated[0, 0]
    assert np.abs(found - [[own, cross], [cross, own]]).max() < 0.01 * own
    assert 0.1 * own < abs(cross) < 0.9 * own  # the halves help each other: a diagonal alone would not do


@cache
def _octants(method: str, step: int = 1) -> Result:
    """Eight panels that move against each other, heard by one receiver."""
    rng = np.random.default_rng(0)
    speeds = SPEED * (rng.normal(size=8) + 1j * rng.normal(size=8))
    return _solved(_panels(2, (0, 1, 2)), _loads(*speeds), np.linspace(100.0, 600.0, 41)[::step], method)


def test_a_reduced_sweep_knows_the_power_of_every_panel_by_itself() -> None:
    """One adjoint and one field per line would say what is heard, but be 1 dB off in what single panels radiate."""
    result, direct = _octants("reduced"), _octants("direct", 10)
    assert result.certificate is not None and result.certificate.certified and result.certificate.factorisations <= 9
    model, exact = (participation(each, RADIATED) for each in (result, direct))
    assert np.abs(10 * np.log10(model.own[::10] / exact.own)).max() < 0.01
    assert np.abs(model.removal_db[::10] - exact.removal_db).max() < 0.01
    assert model.closure < 1e-9 and exact.closure < 1e-9


def test_cross_spectra_and_densities() -> None:
    """A matrix of rank one is the coherent case; a density holds per hertz."""
    f, speeds = np.array([200.0, 300.0]), np.array([SPEED, 0.7j * SPEED])
    matrix = np.broadcast_to(np.outer(speeds, speeds.conj()), (2, 2, 2)).copy()
    held = LoadCase("run", tuple(_loads(1.0, 1.0)), spectrum="density", bandwidth=2.0, combination=CrossSpectrum(f, matrix))
    one, two = (participation(_solved(_panels(2, (2,)), loads, f), RADIATED) for loads in (_loads(*speeds), held))
    assert np.allclose(two.shares, one.shares / 2.0) and np.allclose(two.total, one.total / 2.0)
    assert two.closure < 1e-9


def test_every_surface_has_its_own_power() -> None:
    """Two spheres far apart in one case: what the second does not radiate is not in its power."""
    one = _panels(2, ())
    surfaces = {"p0": one.surfaces["p0"], "p1": one.surfaces["p0"] + len(one.nodes)}
    surfaces |= {f"outer_{i}": one.surfaces["outer"] + i * len(one.nodes) for i in (0, 1)}
    nodes = np.vstack([one.nodes, one.nodes + np.array([3.0, 0.0, 0.0])])
    both = meshes.TestMesh(nodes, np.vstack([one.tets, one.tets + len(one.nodes)]), surfaces)
    result = _solved(both, _loads(SPEED, 0.5 * SPEED), np.array([200.0]))
    whole, *each = (mean_square(result, place)[0] for place in (RADIATED, THROUGH + "outer_0", THROUGH + "outer_1"))
    assert whole == pytest.approx(sum(each), rel=1e-12) and each[0] == pytest.approx(4 * each[1], rel=1e-6)
    assert np.allclose(participation(result, THROUGH + "outer_1").signed, [[0, 1]], atol=1e-9)
    # 4 pi a^2 rho c U^2 (ka)^2 / (1 + (ka)^2) / 2 (Pierce, Acoustics, ch. 4), 2 % of a radius off in the geometry
    ka = 2 * np.pi * 200.0 / 343.0 * RADIUS
    exact = PER_WATT * 2 * np.pi * RADIUS**2 * RHO_C * SPEED**2 * ka**2 / (1 + ka**2)
    assert each[0] == pytest.approx(exact, rel=0.05)


def test_the_file_keeps_what_single_loads_radiate(tmp_path: Path) -> None:
    path, result = tmp_path / "result.h5", _octants("reduced")
    write_result(result, path)
    assert np.array_equal(read_result(path).load_cases[0].radiated, result.load_cases[0].radiated)
    with h5py.File(path, "a") as file:
        held = file["load_cases/0000/radiated"][()]
        del file["load_cases/0000/radiated"]
    before = read_result(path)  # a file of before
    assert np.array_equal(mean_square(before, RADIATED), mean_square(result, RADIATED))
    with pytest.raises(ResultError, match="does not hold what single loads radiate; solve the case again"):
        rank(before, [RADIATED])
    with h5py.File(path, "a") as file:
        file["load_cases/0000/radiated"] = held[:, :, :1]
    with pytest.raises(FormatError, match="radiated has shape"):
        read_result(path)


def test_an_interrupted_sweep_keeps_its_powers(tmp_path: Path) -> None:
    mesh, folder = _panels(2, (2,)), tmp_path / "lines"
    case = case_of(mesh, {"p0": Vibrating(), "p1": Vibrating(), "outer": Radiating()}, _loads(SPEED, 1j * SPEED),
                   [200.0, 300.0], FAR, order=3)  # fmt: skip
    first, again = (solve(case, folder, method="direct") for _ in range(2))  # the second reads every line
    assert first.load_cases[0].radiated.shape == (2, 1, 2, 2)
    assert np.array_equal(first.load_cases[0].radiated, again.load_cases[0].radiated)
