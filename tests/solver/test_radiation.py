"""Shares of the radiated power: they add up, and are what silencing a load and solving again says; transmission loss."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest

import meshes
from cases import case_of
from murmesh.solver.case.boundary import Port, Radiating, Vibrating
from murmesh.solver.case.load import Incoherent, IncomingWave, LoadCase, Monopole, OutsideMonopole, SurfaceVelocity
from murmesh.solver.case.model import Case
from murmesh.solver.case.motion import Uniform
from murmesh.solver.contribution import participation, rank
from murmesh.solver.errors import ResultError
from murmesh.solver.radiation import PER_WATT, RADIATED, THROUGH, mean_square, places
from murmesh.solver.result import Result
from murmesh.solver.sweep import solve
from murmesh.solver.transmission import transmission_loss

LINES = np.linspace(200.0, 600.0, 17)
LOADS = (SurfaceVelocity("disc_0", Uniform(0.01 + 0j)), SurfaceVelocity("disc_1", Uniform(-0.007 + 0.004j)))


def _case(*loads: SurfaceVelocity) -> Case:
    """Two rings of a piston in a rigid floor under a dome, against each other; coherent tones and an incoherent density."""
    mesh = meshes.dome(3, (0.0, 0.08, 0.15, 0.2))
    kinds = {"disc_0": Vibrating(), "disc_1": Vibrating(), "outer": Radiating(ground="rigid")}
    case = case_of(mesh, kinds, list(loads), LINES, {"axis": (0.0, 0.0, 0.4)}, order=2)
    return case.with_(load_cases=(*case.load_cases, LoadCase("noise", loads, "density", combination=Incoherent())))


@cache
def _result(method: str) -> Result:
    return solve(_case(*LOADS), method=method)


@pytest.mark.parametrize("method", ["direct", "reduced"])
@pytest.mark.parametrize("load_case", ["test", "noise"])
def test_shares_of_the_radiated_power_are_those_of_single_solutions(method: str, load_case: str) -> None:
    found, result = participation(_result(method), RADIATED, load_case), _result(method)
    assert found.closure < 1e-9
    assert np.allclose(found.total, PER_WATT * result.load_case(load_case).absorbed[:, -1] / result.bandwidth(load_case))
    for i, kept in enumerate((LOADS[1], LOADS[0])):
        silenced = mean_square(solve(_case(kept)), RADIATED, load_case)
        assert np.allclose(found.without[:, i], silenced, rtol=1e-6)
        assert np.allclose(found.own[:, 1 - i], silenced, rtol=1e-6)


def test_loads_against_each_other_have_a_negative_share() -> None:
    ranking = rank(_result("reduced"), [RADIATED])
    assert ranking.power and ranking.what == "power" and ranking.rows[-1].share < 0 < ranking.rows[-1].removal_db
    assert sum(row.share for row in ranking.rows) == pytest.approx(1.0)
    assert not rank(_result("reduced"), ["axis"]).power


def test_contributions_to_a_receiver_outside_are_those_of_single_solutions() -> None:
    found = participation(_result("reduced"), "axis")
    assert found.closure < 1e-9
    silenced = solve(_case(LOADS[1])).mean_square("axis", "test")
    assert np.abs(10 * np.log10(found.without[:, 0] / silenced)).max() < 0.01


def test_places_of_power_are_named_and_refused_by_their_names() -> None:
    result = _result("direct")
    assert places(result) == ("axis", RADIATED)
    assert np.array_equal(mean_square(result, THROUGH + "outer"), mean_square(result, RADIATED))
    with pytest.raises(ResultError, match="no surface that radiates is called 'outre'; did you mean 'outer'"):
        mean_square(result, THROUGH + "outre")
    with pytest.raises(ResultError, match="cannot be added"):
        rank(result, ["axis", RADIATED])
    closed = solve(
        case_of(meshes.box(1, 1, 1), {}, [Monopole("m", (0.2, 0.2, 0.2), 1e-3)], [100.0], {"p": (0.5, 0.5, 0.5)}, order=2)
    )
    assert places(closed) == ("p",)
    with pytest.raises(ResultError, match="nothing radiates in this case"):
        mean_square(closed, RADIATED)


def test_power_of_a_field_from_outside_is_not_shared_out() -> None:
    mesh = meshes.ball(1, 0.2)
    case = case_of(mesh, {"sphere": Radiating()}, [OutsideMonopole("s", (0.0, 0.0, 0.5), 1e-3)], [200.0], {}, order=2)
    result = solve(case)
    for read in (participation, mean_square):
        with pytest.raises(ResultError, match="'s' is a sound field from outside"):
            read(result, RADIATED)
    assert places(result) == ()


def test_a_straight_duct_has_no_transmission_loss_and_a_wider_one_that_of_its_areas() -> None:
    """Ports of different areas; TL of an empty duct is 0 dB for any pressure of the wave."""
    mesh = meshes.box(1, 1, 4, (0.1, 0.1, 0.5))
    kinds = {"z0": Port(), "z1": Port(), "x0": Vibrating()}
    case = case_of(mesh, kinds, [IncomingWave("z0", 3.0 - 1.0j)], [100.0, 300.0], {"p": (0.05, 0.05, 0.2)}, order=4)
    result = solve(case)
    assert np.abs(transmission_loss(result)).max() < 1e-4
    assert np.array_equal(transmission_loss(result, "z1"), transmission_loss(result))
    with pytest.raises(ResultError, match="no port to leave through is called 'z2'"):
        transmission_loss(result, "z2")


def test_a_transmission_loss_needs_one_wave_and_one_outlet() -> None:
    mesh = meshes.box(1, 1, 2, (0.1, 0.1, 0.5))
    wave, mover = IncomingWave("z0", 1.0), SurfaceVelocity("x0", Uniform(1e-3 + 0j))
    place = {"p": (0.05, 0.05, 0.2)}
    one = case_of(mesh, {"z0": Port(), "x0": Vibrating()}, [wave], [100.0], place, order=2)
    with pytest.raises(ResultError, match="no port but 'z0'"):
        transmission_loss(solve(one))
    both = case_of(mesh, {"z0": Port(), "z1": Port(), "x0": Vibrating()}, [wave, mover], [100.0], place, order=2)
    with pytest.raises(ResultError, match="one incoming wave alone, but 'test' holds z0, x0"):
        transmission_loss(solve(both))
    three = case_of(mesh, {"z0": Port(), "z1": Port(), "x1": Port()}, [wave], [100.0], place, order=2)
    with pytest.raises(ResultError, match=r"may leave through .*; name one of them as the outlet"):
        transmission_loss(solve(three))
