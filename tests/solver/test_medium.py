"""Media at the edges of their sources, and losses as they are measured."""

from __future__ import annotations

import re

import numpy as np
import pytest

from murmesh.solver.case.medium import (
    Air,
    AirAbsorption,
    CombinedDamping,
    Damping,
    GivenFluid,
    LossFactor,
    Medium,
    NoDamping,
    PorousMedium,
    ReverberationTime,
    WallAbsorption,
    Water,
    air_absorption,
    damped,
)
from murmesh.solver.case.porous import Fluid, JohnsonChampouxAllard
from murmesh.solver.case.spectrum import Constant, Table
from murmesh.solver.errors import FieldError
from reading import read_csv_reference

F = np.array([31.5, 125.0, 1000.0])
AIR = Fluid(1.205, 343.0)


@pytest.mark.parametrize("name", Medium.registry)
def test_media_answer_for_every_frequency_and_take_no_energy_from_nothing(name: str) -> None:
    medium = Medium.member(name).example()  # type: ignore[attr-defined]
    rho, c = medium.rho(F), medium.c(F)
    assert rho.shape == c.shape == F.shape
    assert np.all(rho.imag <= 0) and np.all((rho * c**2).imag >= 0)
    assert medium.warnings(np.array([1000.0])) == ()


@pytest.mark.parametrize("name", Damping.registry)
def test_losses_are_losses(name: str) -> None:
    damping = Damping.member(name).example()  # type: ignore[attr-defined]
    assert np.all(damping.loss_factor(F, Air()) >= 0)
    assert np.all(damping.hard_wall_admittance(F, AIR).real >= 0)
    rho, c = damped(Air(), damping, F)
    assert np.all((2 * np.pi * F / c).imag <= 0) and np.all(rho == Air().rho(F))


@pytest.mark.parametrize("medium", [GivenFluid(1.84, 268.0), Water(20.0), PorousMedium(JohnsonChampouxAllard.example())])
def test_a_porous_law_without_a_frame_is_the_fluid(medium: Medium) -> None:
    """All pores and no resistance: the five-parameter law falls back on the fluid's own density and speed."""
    fluid = medium.reference
    empty = JohnsonChampouxAllard(1e-6, 1.0, 1.0, 10.0, 10.0)
    density, modulus = empty.effective(np.array([1000.0]), fluid)
    assert density[0] == pytest.approx(fluid.density, rel=1e-4)
    assert modulus[0] == pytest.approx(fluid.density * fluid.speed**2, rel=1e-4)


def test_speed_of_sound_is_near_its_alternatives_f02_f03() -> None:
    air = read_csv_reference("F02_speed_of_sound_air.csv")
    dry = air["RH"] == 0
    for t, c in zip(air["T_C"][dry], air["c_ISO9613"][dry], strict=True):
        assert Air(t, 101325.0, 0.0).reference.speed == pytest.approx(c, abs=0.2)
    water = read_csv_reference("F03_water_speed.csv")
    for t, c in zip(water["T_C"], water["BilaniukWong"], strict=True):
        assert Water(t).reference.speed == pytest.approx(c, abs=0.05)


def test_humid_air_is_lighter_and_faster() -> None:
    dry, humid = Air(25.0, 101325.0, 0.0).reference, Air(25.0, 101325.0, 100.0).reference
    assert humid.density < dry.density and humid.speed > dry.speed


def test_absorption_of_air_f01b() -> None:
    table = read_csv_reference("F01b_ISO9613_1_octaves.csv")
    exact = 1000 * 10 ** (0.3 * np.round(np.log2(table["nominal_Hz"] / 1000)))
    rows = zip(table["T_C"], table["RH_pct"], exact, table["alpha_dB_per_km"], table["m_per_m"], strict=True)
    for t, h, f, alpha, m in rows:
        found = float(air_absorption(np.array([f]), t, 101325.0, h)[0])
        assert 1000 * found == pytest.approx(alpha, rel=1e-6)
        assert found / (10 * np.log10(np.e)) == pytest.approx(m, rel=1e-6)


def test_air_absorption_is_that_of_the_region_unless_it_is_given() -> None:
    hot = Air(35.0, 90000.0, 20.0)
    alpha = air_absorption(F, 35.0, 90000.0, 20.0) * np.log(10) / 20
    _, c = damped(hot, AirAbsorption(), F)
    assert np.allclose(-(2 * np.pi * F / c).imag, alpha, rtol=1e-6)
    assert AirAbsorption(humidity=80.0).air(hot).humidity == 80.0
    assert AirAbsorption(humidity=80.0).air(hot).temperature == 35.0
    assert AirAbsorption().air(GivenFluid(1.2, 340.0)).temperature == 20.0


def test_a_reverberation_time_is_the_time_of_a_decay_by_60_db() -> None:
    """A mode of real wavenumber rings as e^{i w t} with w = c k, so the level falls by 20 lg(e) Im(w) per second."""
    f, t60 = np.array([100.0]), 0.7
    _, c = damped(GivenFluid(1.2, 340.0), ReverberationTime(t60), f)
    # c / sqrt(1 - i eta) has Im > 0: the ringing decays
    decay = 20 * np.log10(np.e) * (2 * np.pi * f * c / 340.0).imag
    assert decay[0] * t60 == pytest.approx(60.0, rel=1e-3)


def test_losses_add_up() -> None:
    parts = (LossFactor(0.01), ReverberationTime(Constant(0.5 + 0j)), WallAbsorption(0.02), WallAbsorption(0.1))
    both, air = CombinedDamping(parts), Air()
    assert np.allclose(both.loss_factor(F, air), 0.01 + 2.2 / (F * 0.5))
    alone = [part.hard_wall_admittance(F, AIR) for part in parts]
    assert np.allclose(both.hard_wall_admittance(F, AIR), sum(alone))
    assert not np.any(NoDamping().loss_factor(F, air)) and not np.any(NoDamping().hard_wall_admittance(F, AIR))
    assert not np.any(CombinedDamping(()).loss_factor(F, air))


@pytest.mark.parametrize(
    ("value", "words"),
    [
        (-0.1, r"reverberation time is real and not negative, got -0.1.* at 200 Hz"),
        (0.0, "of zero at 200 Hz has no loss"),
    ],
)
def test_reverberation_tables_are_checked(value: float, words: str) -> None:
    table = Table(np.array([100.0, 200.0]), np.array([0.5, value], dtype=complex))
    with pytest.raises(FieldError, match=words):
        ReverberationTime(table).loss_factor(np.array([100.0, 200.0]), Air())


def test_losses_have_no_phase() -> None:
    with pytest.raises(FieldError, match=r"wall absorption is real and not negative, got 0.1\+0.2j at 31.5 Hz"):
        WallAbsorption(Constant(0.1 + 0.2j)).hard_wall_admittance(F, AIR)


@pytest.mark.parametrize(
    ("medium", "words"),
    [
        (Air(-10.0), r"0 .. 30 degC .* \(Cramer.*; -10 degC, 101.325 kPa lies outside"),
        (Air(20.0, 60000.0), "60 kPa lies outside"),
        (Water(20.0, 5.0), r"25 .. 40 g/kg \(Mackenzie.*; 20 degC, 5 g/kg lies outside"),
        (Water(1.0, 35.0), "1 degC, 35 g/kg lies outside"),
    ],
)
def test_ranges_are_said_with_their_source(medium: Medium, words: str) -> None:
    (said,) = medium.warnings(F)
    assert re.search(words, said)


def test_inside_their_range_media_are_silent() -> None:
    assert Air().warnings(F) == Water(20.0, 35.0, 100.0).warnings(F) == Water(60.0).warnings(F) == ()
