"""Stacks that stand still and that move, passivity, and the ends of the laws' ranges."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pytest

from murmesh.solver.case.fields import Declared
from murmesh.solver.case.porous import DelanyBazley, Fluid, JohnsonChampouxAllard, Miki, PorousLaw
from murmesh.solver.case.spectrum import Table
from murmesh.solver.case.wall import (
    Absorption,
    AirGap,
    Given,
    Layer,
    Layers,
    PerforatedFacing,
    PorousLayer,
    Resonator,
    Screen,
    WallLaw,
    check_passive,
    normal_absorption,
    statistical_absorption,
)
from murmesh.solver.errors import FieldError
from reading import read_csv_reference

AIR = Fluid(1.205, 343.0)
F = np.geomspace(20.0, 4000.0, 40)


def _example(family: type[Declared], name: str) -> Layer:
    return family.member(name).example()  # type: ignore[attr-defined,no-any-return]


def test_width_of_a_screen_before_a_gap_d04b() -> None:
    """A pure resistance r rho c before a gap D: alpha halves at cot(k D) = +-(1 + r), B = f2/f1 (Maa 1998, table I)."""
    table, depth = read_csv_reference("D04b_maa_table_I.csv"), 0.1
    for r, alpha_0, printed in zip(table["r"], table["alpha0"], table["printed_B"], strict=True):
        f1 = np.arctan(1 / (1 + r)) * 343.0 / (2 * np.pi * depth)
        f = np.array([f1, f1 * printed, 343.0 / (4 * depth)])
        stack = Layers((Screen(r * AIR.rho_c), AirGap(depth)))
        alpha = normal_absorption(stack.impedance(f, AIR) / AIR.rho_c)
        assert alpha[2] == pytest.approx(alpha_0, rel=1e-9)
        assert alpha[0] == pytest.approx(alpha_0 / 2, rel=1e-9)
        assert alpha[1] == pytest.approx(alpha_0 / 2, rel=0.01)  # B is printed with three figures


@pytest.mark.parametrize("name", Layer.registry)
def test_layers_are_reciprocal(name: str) -> None:
    """det T = 1, on which the carrying of moving stacks rests."""
    assert np.allclose(np.linalg.det(_example(Layer, name).transfer(F, AIR)), 1, rtol=1e-9)


# ---------------------------------------------------------------------------------------------------------------------
# walls that move


def test_frame_forms_of_one_layer() -> None:
    """The three forms of the sign conventions (Biot, J. Appl. Phys. 33 (1962) 1482)."""
    law, d = Miki(15000.0), 0.05
    stack = Layers((PorousLayer(law, d),))
    impedance, k = law.bulk(F, AIR)
    share = AIR.density / law.effective(F, AIR)[0]
    assert np.allclose(stack.impedance(F, AIR), -1j * impedance / np.tan(k * d))
    assert np.all(stack.moving_factor(F, AIR, "face") == 1)
    assert np.allclose(stack.moving_factor(F, AIR, "at_rest"), 1 / np.cos(k * d))
    assert np.allclose(stack.moving_factor(F, AIR, "bonded"), 1 + share * (1 / np.cos(k * d) - 1))


def _direct(stack: Layers, omega: float, bonded: bool, p_front: complex, v_b: complex) -> complex:
    """The flow into a stack, from all plane-wave amplitudes and interface conditions in one linear system.

    Thick layers: p = a e^{-ikx} + b e^{ikx} and v = (k/(w rho_e)) (a e^{-ikx} - b e^{ikx}) + frame, frame = a_j v_b.
    Thin ones: p jumps by Z (v - frame), v is continuous. Unknowns per layer: two amplitudes, or p behind and v.
    """
    f = np.array([omega / (2 * np.pi)])
    ends: list[tuple[npt.NDArray[np.complex128], npt.NDArray[np.complex128], complex]] = []
    for layer in stack.layers:
        frame = complex(layer.frame_share(f, AIR)[0] * v_b if bonded else 0.0)
        if isinstance(layer, PorousLayer | AirGap):
            if isinstance(layer, PorousLayer):
                impedance, k = (complex(value[0]) for value in layer.law.bulk(f, AIR))
            else:
                impedance, k = complex(AIR.rho_c), complex(omega / AIR.speed)

            def state(x: float, k: complex = k, impedance: complex = impedance) -> npt.NDArray[np.complex128]:
                e = np.array([np.exp(-1j * k * x), np.exp(1j * k * x)])
                return np.array([e, e * [1, -1] / impedance])

            ends.append((state(0.0), state(layer.thickness), frame))
        else:
            z = complex(layer.transfer(f, AIR)[0, 0, 1])
            ends.append((np.array([[1, z], [0, 1]], complex), np.eye(2, dtype=complex), frame))
    n = len(ends)
    matrix, right = np.zeros((2 * n, 2 * n), complex), np.zeros(2 * n, complex)
    matrix[0, :2], right[0] = ends[0][0][0], p_front
    for j in range(n - 1):
        here, there = ends[j], ends[j + 1]
        matrix[2 * j + 1 : 2 * j + 3, 2 * j : 2 * j + 2] = here[1]
        matrix[2 * j + 1 : 2 * j + 3, 2 * j + 2 : 2 * j + 4] = -there[0]
        right[2 * j + 2] = there[2] - here[2]
    matrix[-1, -2:], right[-1] = ends[-1][1][1], v_b - ends[-1][2]
    return complex(ends[0][0][1] @ np.linalg.solve(matrix, right)[:2] + ends[0][2])


STACKS = [
    Layers((PerforatedFacing(1e-3, 1e-3, 0.05), PorousLayer(Miki(15000.0), 0.04), AirGap(0.03))),
    Layers((Screen(300.0), PorousLayer(JohnsonChampouxAllard.example(), 0.03), PorousLayer(Miki(40000.0), 0.02))),
    Layers((AirGap(0.02), Screen(500.0), AirGap(0.05), PorousLayer(DelanyBazley(9000.0), 0.02))),
]


@pytest.mark.parametrize("stack", STACKS)
@pytest.mark.parametrize("frame", ["bonded", "at_rest"])
def test_moving_stacks_against_a_direct_solution(stack: Layers, frame: str) -> None:
    f = np.array([80.0, 400.0, 1700.0])
    for i, omega in enumerate(2 * np.pi * f):
        for p, v_b in ((0.0, 1.0), (1.0, 0.0), (2.0 - 1j, 1e-3 + 2e-3j)):
            made = stack.moving_factor(f, AIR, frame)[i] * v_b + stack.admittance(f, AIR)[i] * p
            assert made == pytest.approx(_direct(stack, float(omega), frame == "bonded", p, v_b), rel=1e-9)


def test_forms_differ_where_it_matters() -> None:
    stack, f = STACKS[1], np.array([500.0])
    at_rest, bonded = (stack.moving_factor(f, AIR, frame)[0] for frame in ("at_rest", "bonded"))
    assert abs(np.angle(at_rest / bonded, deg=True)) > 10


def test_a_layer_that_nothing_comes_through() -> None:
    """Two metres of dense wool: at rest it hides the wall, bonded it moves the air by 1 - rho_0/rho_e."""
    law, f = Miki(200000.0), np.array([2000.0, 4000.0])
    stack = Layers((PorousLayer(law, 2.0),))
    assert np.abs(stack.moving_factor(f, AIR, "at_rest")).max() < 1e-20
    assert np.allclose(stack.moving_factor(f, AIR, "bonded"), 1 - AIR.density / law.effective(f, AIR)[0], rtol=1e-12)
    assert np.allclose(stack.impedance(f, AIR), law.bulk(f, AIR)[0], rtol=1e-12)


def test_every_law_answers_for_the_face_and_only_layers_for_frames() -> None:
    for name in WallLaw.registry:
        law = WallLaw.member(name).example()  # type: ignore[attr-defined]
        assert np.all(law.moving_factor(F, AIR, "face") == 1)
        if not isinstance(law, Layers):
            with pytest.raises(FieldError, match=f"'bonded' needs a stack of layers, but the wall law is '{name}'"):
                law.moving_factor(F, AIR, "bonded")


# ---------------------------------------------------------------------------------------------------------------------
# passivity


@pytest.mark.parametrize("law", [JohnsonChampouxAllard.example(), JohnsonChampouxAllard(5e5, 0.8, 2.5, 1e-5, 4e-5)])
@pytest.mark.parametrize("thickness", [0.002, 0.05, 0.5])
def test_the_five_parameter_law_is_passive_at_every_frequency(law: PorousLaw, thickness: float) -> None:
    f = np.geomspace(0.1, 20000.0, 200)
    check_passive(Layers((PorousLayer(law, thickness),)), f, AIR)
    assert law.warnings(f) == ()


@pytest.mark.parametrize("law", [Miki(50000.0), DelanyBazley(20000.0)])
def test_one_parameter_laws_say_where_they_are_active(law: Miki | DelanyBazley) -> None:
    """A thin layer is active just where the warning says, up to the small resistance that its thickness adds."""
    layer = Layers((PorousLayer(law, 1e-4),))
    f = np.geomspace(5.0, 2000.0, 2000)
    active = f[layer.admittance(f, AIR).real < 0]
    said = next(text for text in law.warnings(f) if "is active below" in text)
    assert f"{active.min():g} .. " in said
    assert not any("is active below" in text for text in law.warnings(f[f > 1.01 * active.max()]))
    assert any("is active below" in text for text in law.warnings(np.array([0.99 * active.max()])))
    assert "use johnson_champoux_allard" in said
    with pytest.raises(FieldError, match="wall law 'layers' has Re Z < 0 at 5 Hz"):
        check_passive(layer, f, AIR)


def test_a_table_of_the_other_time_sign_is_as_passive() -> None:
    table = Table(np.array([20.0, 4000.0]), np.array([2 - 5j, 1 + 1j]))
    for sign in "+-":
        check_passive(Given(table, time_sign=sign), F, AIR)
    plus, minus = (Given(table, time_sign=sign).impedance(F, AIR) for sign in "+-")
    assert np.allclose(plus, minus.conj())


# ---------------------------------------------------------------------------------------------------------------------
# ends of the scale


@pytest.mark.parametrize("law", [Given(0j, form="admittance"), Absorption(0.0)])
def test_a_hard_wall_has_no_admittance(law: WallLaw) -> None:
    assert np.all(law.admittance(F, AIR) == 0)
    assert np.all(np.isinf(law.impedance(F, AIR)))
    check_passive(law, F, AIR)


@pytest.mark.parametrize("law", [Given(0j), Resonator(0.0, 0.0, 0.0)])
def test_a_soft_wall_is_a_pressure(law: WallLaw) -> None:
    with pytest.raises(FieldError, match=r"zero \(at 20 Hz\) is a pressure-release surface; use the boundary kind 'pressure'"):
        law.admittance(np.array([20.0]), AIR)


@pytest.mark.parametrize("alpha", [-0.1, 1.1])
def test_absorption_over_frequency_stays_between_zero_and_one(alpha: float) -> None:
    table = Table(np.array([20.0, 4000.0]), np.array([0.5, alpha], dtype=complex))
    with pytest.raises(FieldError, match="an absorption coefficient lies between 0 and 1, got"):
        Absorption(table).admittance(F, AIR)


def test_no_locally_reacting_wall_absorbs_more_than_0_951() -> None:
    """The maximum of Paris's integral, 0.951 at a real zeta of 1.567 (Kuttruff, Room Acoustics, sect. 2.5)."""
    zeta = np.linspace(1.0, 3.0, 2001)[:, None] + 1j * np.linspace(-1.0, 1.0, 21)
    alpha = statistical_absorption(zeta)
    at = np.unravel_index(np.argmax(alpha), alpha.shape)
    assert alpha[at] == pytest.approx(0.951, abs=5e-4)
    assert zeta[at] == pytest.approx(1.567, abs=2e-3)


def test_statistical_absorption_is_paris_integral() -> None:
    theta = (np.arange(20000) + 0.5) / 20000 * np.pi / 2
    for zeta in (0.4 + 2j, 3 - 1.5j, 10 + 0j):
        alpha = normal_absorption(zeta * np.cos(theta))
        paris = np.sum(alpha * np.sin(2 * theta)) * np.pi / 2 / len(theta)
        assert statistical_absorption(np.array([zeta]))[0] == pytest.approx(paris, rel=1e-6)
