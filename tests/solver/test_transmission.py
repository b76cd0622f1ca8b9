"""Transmission loss against closed forms of plane waves; where it stops to hold."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
import pytest

import meshes
from cases import case_of
from murmesh.solver.case.boundary import Boundary, Port
from murmesh.solver.case.load import IncomingWave, Load
from murmesh.solver.case.medium import GivenFluid, NoDamping
from murmesh.solver.case.model import Region
from murmesh.solver.case.spectrum import Lines
from murmesh.solver.errors import ValidityWarning
from murmesh.solver.sweep import solve
from murmesh.solver.transmission import cut_on, transmission_loss

F = np.array([100.0, 180.0, 250.0])
PORTS: Mapping[str, Boundary] = {"x0": Port(), "x1": Port()}
WAVE: list[Load] = [IncomingWave("x0", 1.0 + 0j)]
TUBE = meshes.box(4, 1, 1, (1.0, 0.2, 0.2))


@pytest.mark.parametrize("source", ["x0", "x1"])
def test_transmission_loss_between_two_fluids(source: str) -> None:
    """A change of rho c alone: TL = 10 lg( (Z_1 + Z_2)^2 / (4 Z_1 Z_2) ), whichever way the wave goes."""
    regions = [Region("light", GivenFluid(1.21, 343.0), NoDamping()), Region("heavy", GivenFluid(3.0, 250.0), NoDamping())]
    behind = (TUBE.centroids[:, 0] > 0.5).astype(np.int64)
    z = np.array([1.21 * 343.0, 3.0 * 250.0])
    case = case_of(TUBE, PORTS, [IncomingWave(source, 2.0 - 1.0j)], F, {}, regions=regions, tet_region=behind, order=5)
    result = solve(case)
    assert np.abs(transmission_loss(result) - 10 * np.log10(z.sum() ** 2 / (4 * z.prod()))).max() < 1e-3
    assert cut_on(result, "x0") == pytest.approx(343.0 / (2 * 0.2), rel=0.01)
    assert cut_on(result, "x1") == pytest.approx(250.0 / (2 * 0.2), rel=0.01)


def test_ports_of_different_areas() -> None:
    """Far below cut-on a step of the area acts by itself: TL = 10 lg( (S_1 + S_2)^2 / (4 S_1 S_2) ), here 9/8."""
    full = meshes.box(4, 2, 2, (1.0, 0.2, 0.2))
    keep = (full.centroids[:, 0] < 0.5) | (full.centroids[:, 1] < 0.1)
    used, flat = np.unique(full.tets[keep], return_inverse=True)
    mesh = meshes.TestMesh(full.nodes[used], flat.reshape(-1, 4))
    ends = {f"x{i}": meshes.faces_where(mesh, lambda x, i=i: np.isclose(x[..., 0], float(i))) for i in (0, 1)}
    result = solve(case_of(replace(mesh, surfaces=ends), PORTS, WAVE, [5.0], {}, order=4))
    assert transmission_loss(result)[0] == pytest.approx(10 * np.log10(9 / 8), abs=2e-3)


def test_lines_above_the_cut_on_are_warned_of() -> None:
    result = solve(case_of(TUBE, PORTS, WAVE, [800.0, 900.0], {}, order=4))
    with pytest.warns(ValidityWarning, match=r"first cut-on at 85\d(\.\d)? Hz.*ends at 900 Hz"):
        found = transmission_loss(result)
    assert np.abs(found).max() < 0.01


def test_lines_without_a_wave_have_no_loss() -> None:
    wave = IncomingWave("x0", Lines(F[1:2], np.array([1.0 + 0j])))
    found = transmission_loss(solve(case_of(TUBE, PORTS, [wave], F, {}, order=4)))
    assert np.array_equal(np.isfinite(found), [False, True, False])
    assert found[1] == pytest.approx(0.0, abs=1e-3)
