"""Porous laws, layers, perforates, absorption and media, against published values (tests/references, cited there)."""

from __future__ import annotations

import ast
import re

import numpy as np
import pytest

from murmesh.solver.case.medium import (
    Air,
    GivenFluid,
    LossFactor,
    PorousMedium,
    ReverberationTime,
    WallAbsorption,
    Water,
    air_absorption,
    damped,
)
from murmesh.solver.case.porous import DelanyBazley, Fluid, JohnsonChampouxAllard, Miki
from murmesh.solver.case.spectrum import Table
from murmesh.solver.case.wall import (
    Absorption,
    AirGap,
    Given,
    Layers,
    LimpMass,
    MassSpringDamper,
    PerforatedFacing,
    PerforatedPlate,
    PorousLayer,
    Resonator,
    Screen,
    check_passive,
    normal_absorption,
    statistical_absorption,
)
from murmesh.solver.errors import FieldError
from reading import FOLDER, read_csv_reference

AIR = Fluid(1.205, 343.0)


@pytest.mark.parametrize(("model", "law"), [("miki", Miki(20000.0)), ("delany_bazley", DelanyBazley(20000.0))])
def test_one_parameter_laws_d01(model: str, law: Miki | DelanyBazley) -> None:
    table = read_csv_reference("D01_delany_bazley_miki_50mm.csv")
    rows = table["model"] == model
    f = table["f"][rows]
    impedance, k = law.bulk(f, AIR)
    assert np.allclose(impedance / AIR.rho_c, table["Zc_re"][rows] + 1j * table["Zc_im"][rows], rtol=1e-9)
    assert np.allclose(k / (2 * np.pi * f / 343.0), table["k_re"][rows] + 1j * table["k_im"][rows], rtol=1e-9)
    zeta = Layers((PorousLayer(law, 0.05),)).impedance(f, AIR) / AIR.rho_c
    assert np.allclose(zeta, table["zs_re"][rows] + 1j * table["zs_im"][rows], rtol=1e-9)
    assert np.allclose(normal_absorption(zeta), table["alpha0"][rows], rtol=1e-9)


def test_five_parameter_law_d03() -> None:
    table = read_csv_reference("D03_jca_allard_specimens.csv")
    header = (FOLDER / "D03_jca_allard_specimens.csv").read_text().splitlines()[0]
    found = re.search(r"\{.*?\}", header)
    assert found
    for name, (*law, thickness) in ast.literal_eval(found.group()).items():
        rows = table["specimen"] == name
        assert rows.any()
        material, f = JohnsonChampouxAllard(*law), table["f"][rows]
        density, modulus = material.effective(f, AIR)
        zeta = Layers((PorousLayer(material, thickness),)).impedance(f, AIR) / AIR.rho_c
        assert np.allclose(density, table["rho_e_re"][rows] + 1j * table["rho_e_im"][rows], rtol=1e-6)
        assert np.allclose(modulus, table["K_re"][rows] + 1j * table["K_im"][rows], rtol=1e-6)
        assert np.allclose(zeta, table["zs_re"][rows] + 1j * table["zs_im"][rows], rtol=1e-6)


def test_micro_perforated_plate_d04() -> None:
    table = read_csv_reference("D04_mpp_maa_fig5.csv")
    plate = PerforatedFacing(0.2e-3, 0.2e-3, np.pi / 4 * (0.2 / 2.5) ** 2)
    zeta = Layers((plate, AirGap(0.06))).impedance(table["f"], AIR) / AIR.rho_c
    assert np.abs(normal_absorption(zeta) - table["alpha"]).max() < 1e-6


def test_statistical_absorption_d05() -> None:
    table = read_csv_reference("D05_statistical_absorption.csv")
    zeta = table["zeta_re"] + 1j * table["zeta_im"]
    assert np.abs(statistical_absorption(zeta) - table["alpha_stat"]).max() < 1e-6
    assert np.abs(normal_absorption(zeta) - table["alpha_normal"]).max() < 1e-6


def test_perforated_plate_c04() -> None:
    table = read_csv_reference("C04_concentric_tube_resonator.csv")
    plate = PerforatedPlate(2.49e-3, 0.81e-3, 0.037)
    zeta = plate.impedance(table["f"], Fluid(1.21, 343.0)) / (1.21 * 343.0)
    assert np.allclose(zeta, table["zeta_re"] + 1j * table["zeta_im"], rtol=1e-6)


def test_frame_forms_of_a_stack_against_a_boundary_value_solution() -> None:
    """Two bonded porous layers solved from their differential equations, by superposition of plane waves per layer.

    In a frame that moves with v_b:  -p' = i w (rho_e w + rho_0 v_b),  -w' = i w p / K,  w = v - v_b (Biot 1962).
    """
    f = np.array([200.0, 900.0])
    layers = (PorousLayer(Miki(8000.0), 0.03), PorousLayer(Miki(30000.0), 0.02))
    stack = Layers(layers)
    for i, omega in enumerate(2 * np.pi * f):
        # unknowns a, b per layer: p = a e^{-ikx} + b e^{ikx}; w = -(p' / (i omega) + rho_0 v_b) / rho_e
        rows, right = np.zeros((4, 4), complex), np.zeros(4, complex)
        rho, k, share = [], [], []
        for layer in layers:
            density, modulus = (value[i] for value in layer.law.effective(f, AIR))
            rho.append(density)
            k.append(omega * np.sqrt(density / modulus))
            share.append(AIR.density / density)
        d1, d2 = layers[0].thickness, layers[1].thickness

        def wave(n: int, x: float, rho: list[complex] = rho, k: list[complex] = k, omega: float = omega):  # type: ignore[no-untyped-def]
            e = np.array([np.exp(-1j * k[n] * x), np.exp(1j * k[n] * x)])
            return e, k[n] / (omega * rho[n]) * e * np.array([1, -1])

        p_front, w_front = wave(0, 0.0)
        (p_a, w_a), (p_b, w_b), (_, w_wall) = wave(0, d1), wave(1, 0.0), wave(1, d2)
        rows[0, :2] = p_front  # p = 0 in front
        rows[1] = [*p_a, *-p_b]
        rows[2], right[2] = [*w_a, *-w_b], share[0] - share[1]
        rows[3, 2:], right[3] = w_wall, share[1]
        unknown = np.linalg.solve(rows, right)
        flow = 1.0 + w_front @ unknown[:2] - share[0]
        assert stack.moving_factor(f, AIR, "bonded")[i] == pytest.approx(flow, rel=1e-9)


def test_bonded_screen_and_foil() -> None:
    """A screen fixed to the wall moves with it and changes nothing at p = 0 in front of a closed wall."""
    f = np.array([100.0])
    stack = Layers((Screen(500.0),))
    assert stack.moving_factor(f, AIR, "bonded")[0] == pytest.approx(1.0)
    assert abs(Layers((LimpMass(3.0), AirGap(0.1))).moving_factor(f, AIR, "at_rest")[0] - 1) > 0.1


def test_frames_other_than_face_need_layers() -> None:
    with pytest.raises(FieldError, match="needs a stack of layers, but the wall law is 'given'"):
        Given(1.0 + 0j).moving_factor(np.ones(1), AIR, "bonded")


def test_unknown_frame() -> None:
    with pytest.raises(FieldError, match="frame 'loose' is not known"):
        Layers((Screen(1.0),)).moving_factor(np.ones(1), AIR, "loose")


def test_units_forms_and_time_signs_agree() -> None:
    f, z = np.array([250.0]), 3 - 1.5j
    forms = [
        Given(z, "rho_c"),
        Given(z * AIR.rho_c, "Pa.s/m"),
        Given(1 / z, "rho_c", "admittance"),
        Given(z.conjugate(), "rho_c", "impedance", "-"),
    ]
    for law in forms:
        assert law.impedance(f, AIR)[0] == pytest.approx(z * AIR.rho_c)


def test_resonator_and_mass_spring_damper() -> None:
    f = np.array([80.0])
    w = 2 * np.pi * 80
    assert Resonator(400.0, 1.2, 3e5).impedance(f, AIR)[0] == pytest.approx(400 + 1.2j * w + 3e5 / (1j * w))
    wall = MassSpringDamper(8.0, 80.0, 0.1)
    assert wall.impedance(f, AIR)[0] == pytest.approx(8.0 * w * 0.1)  # at resonance only the damper is left


def test_absorption_gives_back_its_coefficient() -> None:
    zeta = Absorption(0.36).impedance(np.ones(1), AIR) / AIR.rho_c
    assert normal_absorption(zeta)[0] == pytest.approx(0.36)
    assert zeta[0].real >= 1


def test_active_walls_are_refused() -> None:
    table = Table(np.array([50.0, 150.0]), np.array([1.0 + 0j, -1.0 + 0j]))
    with pytest.raises(FieldError, match="Re Z < 0 at 120 Hz"):
        check_passive(Given(table), np.array([60.0, 120.0, 140.0]), AIR)
    check_passive(Given(table), np.array([60.0, 90.0]), AIR)


def test_zero_impedance_is_refused() -> None:
    with pytest.raises(FieldError, match="use the boundary kind 'pressure'"):
        Given(0j).admittance(np.ones(1), AIR)


def test_empty_stack_is_refused() -> None:
    with pytest.raises(FieldError, match="at least one layer"):
        Layers(())


@pytest.mark.parametrize("law", [Miki(20000.0), DelanyBazley(20000.0)])
def test_ranges_are_said_with_their_source(law: Miki | DelanyBazley) -> None:
    assert law.warnings(np.array([1000.0])) == ()
    assert "Acoust" in law.warnings(np.array([10.0, 1000.0]))[0]
    assert Layers((PorousLayer(law, 0.05),)).warnings(np.array([10.0]))
    assert PorousMedium(law).warnings(np.array([10.0]))


# ---------------------------------------------------------------------------------------------------------------------
# media


def test_speed_of_sound_in_air_f02() -> None:
    table = read_csv_reference("F02_speed_of_sound_air.csv")
    for t, humidity, c in zip(table["T_C"], table["RH"], table["c_Cramer"], strict=True):
        assert Air(t, 101325.0, 100 * humidity).reference.speed == pytest.approx(c, abs=1e-6)


def test_density_of_dry_air_f02b() -> None:
    table = read_csv_reference("F02b_dry_air_ideal.csv")
    for t, rho in zip(table["T_C"], table["rho"], strict=True):
        assert Air(t, 101325.0, 0.0).reference.density == pytest.approx(rho, rel=1e-5)


def test_absorption_of_air_f01() -> None:
    table = read_csv_reference("F01_ISO9613_1_printed_cells.csv")
    for t, h, f, printed, exact in zip(
        *(table[k] for k in ("T_C", "RH_pct", "exact_Hz", "printed_dB_per_km", "formula_exact_midband")), strict=True
    ):
        found = 1000 * float(air_absorption(np.array([f]), t, 101325.0, h)[0])
        assert found == pytest.approx(exact, rel=1e-6)
        assert found == pytest.approx(printed, rel=5e-3)


def test_water_f03_f04() -> None:
    table = read_csv_reference("F03_water_speed.csv")
    for t, c in zip(table["T_C"], table["Marczak"], strict=True):
        assert Water(t).reference.speed == pytest.approx(c, abs=1e-3)
    sea = read_csv_reference("F04_sea_water_speed.csv")
    for t, s, c in zip(sea["T_C"][:-1], sea["S"][:-1], sea["Mackenzie_z0"][:-1], strict=True):
        assert Water(float(t), float(s)).reference.speed == pytest.approx(float(c), abs=1e-3)
    assert Water(25.0, 35.0, 1000.0).reference.speed == pytest.approx(1550.744, abs=1e-3)


@pytest.mark.parametrize(
    ("make", "words"),
    [(lambda: Water(20.0, 0.0, 10.0), "only known for sea water"), (lambda: Water(40.0, 35.0), "0 to 30 degC")],
)
def test_water_out_of_range(make: object, words: str) -> None:
    with pytest.raises(FieldError, match=words):
        make()  # type: ignore[operator]


def test_damping_as_measured() -> None:
    f, air = np.array([100.0, 200.0]), GivenFluid(1.2, 340.0)
    _, c = damped(air, LossFactor(0.02), f)
    assert np.allclose((340.0 / c) ** 2, 1 - 0.02j)
    assert np.allclose(ReverberationTime(0.5).loss_factor(f, air), 2.2 / (f * 0.5))
    wall = WallAbsorption(0.02)
    zeta = 1 / (wall.hard_wall_admittance(f, AIR) * AIR.rho_c)
    assert np.allclose(normal_absorption(zeta), 0.02)
    assert not np.any(wall.loss_factor(f, air))


def test_negative_damping_is_refused() -> None:
    table = Table(np.array([10.0, 1000.0]), np.array([0.1 + 0j, -0.1 + 0j]))
    with pytest.raises(FieldError, match="real and not negative"):
        LossFactor(table).loss_factor(np.array([900.0]), GivenFluid(1.2, 340.0))
