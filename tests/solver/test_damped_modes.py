"""Damped modes against closed forms. Sources of the values: headers of A04 and A12 in tests/references."""

from __future__ import annotations

import numpy as np
import pytest

from cases import case_of, lossy, monopole
from meshes import box, grid
from murmesh.solver.case.boundary import Impedance
from murmesh.solver.case.medium import GivenFluid
from murmesh.solver.case.model import Case, Region
from murmesh.solver.case.spectrum import Table
from murmesh.solver.case.wall import Given
from murmesh.solver.damped_modes import DampedModes, damped_modes
from murmesh.solver.modes import modes
from reading import read_csv_reference

A04 = read_csv_reference("A04_duct_impedance_eigenfrequencies.csv")
LENGTH, THIN = 1.2, 0.08


def _duct(zeta: object, eta: float = 0.0) -> Case:
    kinds = {"x1": Impedance(Given(zeta, "rho_c"))}  # type: ignore[arg-type]
    receivers = {"r": (0.3, 0.04, 0.04)}
    lines = [10.0, 1000.0]
    loads = [monopole((0.11, 0.03, 0.05))]
    return case_of(box(6, 1, 1, (LENGTH, THIN, THIN)), kinds, loads, lines, receivers, damping=lossy(eta), order=6)


@pytest.mark.parametrize("zeta", sorted({complex(a, b) for a, b in zip(A04["zeta_re"], A04["zeta_im"], strict=True)}, key=abs))
def test_duct_with_an_impedance_a04(zeta: complex) -> None:
    rows = (A04["zeta_re"] == zeta.real) & (A04["zeta_im"] == zeta.imag) & (A04["f_re_Hz"] >= 0)
    exact = (A04["f_re_Hz"] + 1j * A04["f_im_Hz"])[rows]
    found = damped_modes(_duct(zeta), 4, near=250.0)
    nearest = exact[np.argsort(np.abs(exact - 250.0))[:4]]
    assert np.all(np.abs(found.frequencies - nearest) < 1e-4 * np.abs(nearest)), (found.frequencies, nearest)
    assert np.array_equal(found.held, found.frequencies.real < 10.0)


def test_the_overdamped_branch_a04() -> None:
    """zeta = 2: a mode without oscillation, f = 24.99 i Hz."""
    found = damped_modes(_duct(2.0), 1)
    assert abs(found.frequencies[0] - 24.988918610449687j) < 1e-3
    assert found.held[0] and found.reverberation_times[0] == pytest.approx(np.log(1000) / (2 * np.pi * 24.9889), rel=1e-4)


def test_two_fluids_a12() -> None:
    case = _two_fluids()
    exact = read_csv_reference("A12_two_fluid_box_eigenfrequencies.csv")["f_Hz"]
    found = damped_modes(case, 5, near=200.0)
    assert np.allclose(found.frequencies.real, exact[np.argsort(np.abs(exact - 200.0))[:5]], rtol=1e-4)
    assert np.all(np.abs(found.frequencies.imag) < 1e-6)
    assert np.all(np.isinf(found.reverberation_times) | (found.reverberation_times > 1e5))


def _two_fluids() -> Case:
    mesh = grid(np.linspace(0, 1.7, 18)[[0, 3, 6, 9, 11, 14, 17]], np.linspace(0, 0.8, 4), np.linspace(0, 0.5, 3))
    second = (mesh.centroids[:, 0] > 1.1).astype(np.int64)
    regions = [Region("light", GivenFluid(1.21, 343.0)), Region("heavy", GivenFluid(1.84, 268.0))]
    return case_of(
        mesh, {}, [monopole((0.21, 0.31, 0.12))], [10.0, 500.0], {"r": (1.3, 0.5, 0.3)},
        regions=regions, tet_region=second, order=5,
    )  # fmt: skip


def test_a_loss_factor_gives_itself_back() -> None:
    """k^2 = (w/c)^2 (1 - i eta): f = f_0 / sqrt(1 - i eta), loss factor close to eta; shapes are those without loss."""
    case = case_of(
        box(2, 2, 2, (0.9, 0.7, 0.5)), {}, [monopole((0.2, 0.2, 0.2))], [50.0, 500.0], {"r": (0.5, 0.5, 0.4)},
        damping=lossy(0.04), order=5,
    )  # fmt: skip
    found, hard = damped_modes(case, 3, near=220.0), modes(case, 3, near=220.0)
    by_real = np.argsort(found.frequencies.real)
    assert np.allclose(found.frequencies[by_real], hard.frequencies / np.sqrt(1 - 0.04j), rtol=1e-6)
    assert np.allclose(found.loss_factors, 0.04, rtol=1e-3)
    assert np.allclose(np.abs(found.shapes[:, by_real]), np.abs(hard.shapes), atol=1e-4)


def _settled_by_hand(zeta_at: object, start: complex) -> complex:
    """tan(kL) = i / zeta(Re f) solved by fixed point on the closed form, for a branch n."""
    f = start
    for _ in range(60):
        zeta = zeta_at(f.real)  # type: ignore[operator]
        n = round((2 * LENGTH * start.real / 343.0) - np.arctan(1j / zeta).real / np.pi)
        f = (n * np.pi + np.arctan(1j / zeta)) * 343.0 / (2 * np.pi * LENGTH)
    return complex(f)


def test_a_law_that_changes_with_frequency_is_taken_at_the_mode() -> None:
    table = Table(np.array([10.0, 1000.0]), np.array([6.0 - 4.0j, 2.0 - 0.5j]))
    at = lambda f: np.interp(f, [10, 1000], [6.0, 2.0]) + 1j * np.interp(f, [10, 1000], [-4.0, -0.5])  # noqa: E731
    found: DampedModes = damped_modes(_duct(table), 2, near=430.0)
    for f in found.frequencies:
        assert abs(f - _settled_by_hand(at, complex(f))) < 1e-4 * abs(f)
    frozen = damped_modes(_duct(complex(at(430.0))), 1, near=430.0)
    assert abs(frozen.frequencies[0] - found.frequencies[0]) > 1e-4 * 430
