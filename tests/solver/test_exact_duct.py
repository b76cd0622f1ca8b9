"""Ducts with exact one-dimensional solutions: a piston and an impedance, moving treated walls, bulk layers, tubes.

Sources of the values: headers of the files in tests/references (A06, A07, A08, A08b, C05, K01).
"""

from __future__ import annotations

import numpy as np
import pytest

from cases import AIR, RHO_C, case_of
from meshes import TestMesh, box, grid
from murmesh.solver.case.boundary import Impedance, Port, Rigid, Vibrating, VibratingTreated
from murmesh.solver.case.load import IncomingWave, SurfaceVelocity
from murmesh.solver.case.medium import PorousMedium
from murmesh.solver.case.model import Region
from murmesh.solver.case.motion import Uniform
from murmesh.solver.case.porous import Miki
from murmesh.solver.case.wall import Given, Layers, PorousLayer
from murmesh.solver.result import Result
from murmesh.solver.sweep import solve
from reading import read_csv_reference

SIDES = (0.05, 0.05)


def _duct(length: float, cells: int) -> TestMesh:
    return box(cells, 1, 1, (length, *SIDES))


def _on_axis(x: float) -> tuple[float, float, float]:
    return (x, SIDES[0] / 2, SIDES[1] / 2)


def _pressures(result: Result, f: float) -> np.ndarray:
    line = int(np.argmin(np.abs(result.frequencies - f)))
    return result.load_cases[0].contributions[line].sum(axis=1)


def _balanced(result: Result) -> None:
    assert np.abs(result.imbalance()).max() < 1e-8
    assert result.load_cases[0].closure.max() < 1e-9


def test_piston_and_impedance_a06() -> None:
    table = read_csv_reference("A06_duct_piston_impedance.csv")
    pairs = sorted(set(zip(table["zeta_re"], table["zeta_im"], strict=True)))
    assert len(pairs) == 3
    for re, im in pairs:
        rows = (table["zeta_re"] == re) & (table["zeta_im"] == im)
        places = sorted(set(table["x_m"][rows]))
        case = case_of(
            _duct(1.2, 6),
            {"x0": Vibrating(), "x1": Impedance(Given(complex(re, im), unit="rho_c"))},
            [SurfaceVelocity("x0", Uniform(0.01 + 0j))],
            set(table["f_Hz"][rows]),
            {f"{x:g}": _on_axis(x) for x in places},
            order=6,
        )
        result = solve(case)
        _balanced(result)
        for f, x, p_re, p_im in zip(*(table[k][rows] for k in ("f_Hz", "x_m", "p_re_Pa", "p_im_Pa")), strict=True):
            exact = complex(p_re, p_im)
            assert abs(_pressures(result, f)[places.index(x)] - exact) < 1e-4 * abs(exact)


def test_order_one_is_not_exact_a06() -> None:
    table = read_csv_reference("A06_duct_piston_impedance.csv")
    case = case_of(
        _duct(1.2, 6),
        {"x0": Vibrating(), "x1": Impedance(Given(complex(2.0, -1.5), unit="rho_c"))},
        [SurfaceVelocity("x0", Uniform(0.01 + 0j))],
        [250.0],
        {"0": _on_axis(0.0)},
        order=1,
    )
    exact = complex(table["p_re_Pa"][4], table["p_im_Pa"][4])
    assert table["f_Hz"][4] == 250
    assert abs(_pressures(solve(case), 250.0)[0] - exact) > 1e-3 * abs(exact)


@pytest.mark.parametrize("given", [2.0 - 3.0j, 0.8 - 6.0j])
def test_moving_face_a07(given: complex) -> None:
    table = read_csv_reference("A07_moving_treated_wall.csv")
    rows = (table["zeta_re"] == given.real) & (table["zeta_im"] == given.imag)
    assert rows.sum() >= 9
    places = sorted(set(table["x_m"][rows]))
    motion = Uniform(0.002 * np.exp(0.7j), positive="out_of_fluid")
    case = case_of(
        _duct(1.2, 6),
        {"x1": VibratingTreated(Given(given, unit="rho_c"))},
        [SurfaceVelocity("x1", motion)],
        set(table["f_Hz"][rows]),
        {f"{x:g}": _on_axis(x) for x in places},
        order=6,
    )
    result = solve(case)
    _balanced(result)
    for f, x, p_re, p_im in zip(*(table[k][rows] for k in ("f_Hz", "x_m", "p_re_Pa", "p_im_Pa")), strict=True):
        exact = complex(p_re, p_im)
        assert abs(_pressures(result, f)[places.index(x)] - exact) < 1e-4 * abs(exact)


FOAM = Layers((PorousLayer(Miki(20000.0), 0.05),))
FORMS = {"face": "face", "bonded": "moving", "at_rest": "rest"}


@pytest.mark.parametrize("frame", FORMS)
def test_three_forms_of_a_layer_on_a_moving_wall_a08b(frame: str) -> None:
    """The layer as an impedance: the duct ends at its face, 50 mm in front of the wall."""
    table = read_csv_reference("A08b_layer_frame_moves_with_wall.csv")
    case = case_of(
        _duct(1.15, 12),
        {"x1": VibratingTreated(FOAM, frame)},
        [SurfaceVelocity("x1", Uniform(0.002 + 0j, positive="out_of_fluid"))],
        table["f_Hz"],
        {"x0": _on_axis(0.0)},
        order=7,
    )
    result = solve(case)
    exact = table[f"{FORMS[frame]}_re"] + 1j * table[f"{FORMS[frame]}_im"]
    found = result.load_cases[0].contributions[:, 0, 0]
    assert np.abs(found - exact).max() < 1e-3 * np.abs(exact).min()
    _balanced(result)


def test_the_default_form_of_a_layer_is_bonded() -> None:
    assert VibratingTreated(FOAM).form == "bonded"
    assert VibratingTreated(Given(1.0 + 0j)).form == "face"


def test_porous_volume_in_front_of_a_moving_wall_a08() -> None:
    """The layer as a second fluid, meshed; its frame is at rest."""
    table = read_csv_reference("A08_bulk_layer_on_moving_wall.csv")
    mesh = grid(np.concatenate([np.linspace(0, 1.15, 13), [1.175, 1.2]]), [0, 0.05], [0, 0.05])
    case = case_of(
        mesh,
        {"x1": Vibrating()},
        [SurfaceVelocity("x1", Uniform(0.002 + 0j, positive="out_of_fluid"))],
        table["f_Hz"],
        {"x0": _on_axis(0.0)},
        regions=(Region("air", AIR), Region("foam", PorousMedium(Miki(20000.0), density=1.21, speed=343.0))),
        tet_region=(mesh.centroids[:, 0] > 1.15).astype(np.int64),
        order=7,
    )
    result = solve(case)
    exact = table["p_x0_re"] + 1j * table["p_x0_im"]
    found = result.load_cases[0].contributions[:, 0, 0]
    assert np.abs(found - exact).max() < 1e-3 * np.abs(exact).min()
    _balanced(result)


def test_frequency_dependent_impedance_k01() -> None:
    table = read_csv_reference("K01_frequency_sweep_miki_duct.csv")
    lines = slice(None, None, 40)
    case = case_of(
        _duct(2.4, 14),
        {"x0": Vibrating(), "x1": Impedance(Layers((PorousLayer(Miki(9000.0), 0.06),)))},
        [SurfaceVelocity("x0", Uniform(0.01 + 0j))],
        table["f"][lines],
        {"r": _on_axis(0.37)},
        order=6,
    )
    result = solve(case)
    found = 10 * np.log10(result.mean_square("r") / 4e-10)
    assert np.abs(found - table["Lp_rms_dB"][lines]).max() < 0.01


def test_two_microphones_find_the_sample_c05() -> None:
    """The impedance tube as an experiment (ISO 10534-2): transfer function between two microphones, then reflection."""
    table = read_csv_reference("C05_two_microphone.csv")
    case = case_of(
        _duct(0.3, 12),
        {"x0": Vibrating(), "x1": Impedance(Layers((PorousLayer(Miki(18000.0), 0.04),)))},
        [SurfaceVelocity("x0", Uniform(0.01 + 0j))],
        table["f"],
        {"far": _on_axis(0.3 - 0.16), "near": _on_axis(0.3 - 0.125)},
        order=7,
    )
    p = solve(case).load_cases[0].contributions[:, :, 0]
    transfer = p[:, 1] / p[:, 0]
    k = 2 * np.pi * table["f"] / 343.0
    reflection = (transfer - np.exp(-0.035j * k)) / (np.exp(0.035j * k) - transfer) * np.exp(0.32j * k)
    exact = table["R_re"] + 1j * table["R_im"]
    assert np.abs(transfer - (table["H12_re"] + 1j * table["H12_im"])).max() < 5e-3
    assert np.abs(reflection - exact).max() < 5e-3


def test_ports_pass_a_plane_wave() -> None:
    """An empty duct between two ports: |p| is that of the incoming wave everywhere, and all its power leaves."""
    case = case_of(
        _duct(1.2, 6),
        {"x0": Port(), "x1": Port()},
        [IncomingWave("x0", 2.0 + 0j)],
        [100.0, 500.0],
        {"in": _on_axis(0.0), "out": _on_axis(1.2)},
        order=6,
    )
    result = solve(case)
    p = result.load_cases[0].contributions[:, :, 0]
    k = 2 * np.pi * result.frequencies / 343.0
    assert np.allclose(p[:, 0], 2.0, rtol=1e-6)
    assert np.allclose(p[:, 1], 2.0 * np.exp(-1.2j * k), rtol=1e-6)
    power = 0.5 * 4.0 / RHO_C * SIDES[0] * SIDES[1]
    leaves = result.load_cases[0].absorbed[:, result.power_labels.index("surface/x1")]
    assert np.allclose(leaves, power, rtol=1e-6)
    _balanced(result)


def test_rigid_ends_stay_rigid() -> None:
    assert Rigid().hard and not Rigid().moves
