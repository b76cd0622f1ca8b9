"""Sound in a duct in closed form: a plane field between two ends, and layers by the exponential of their equations.

Written from the equations of linear acoustics (momentum and mass balance), e^{+iwt}; independent of the solver's own laws.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import reduce

import numpy as np
import numpy.typing as npt
from scipy.linalg import expm

from murmesh.solver.case.medium import GivenFluid

Complex = npt.NDArray[np.complex128]
Floats = npt.NDArray[np.float64]
End = tuple[complex | Complex, complex | Complex]
"""Y and v_s of an end that takes in v_n = v_s + Y p, both along the outward normal."""


def field(x: float, f: Floats, air: GivenFluid, length: float, left: End, right: End, eta: float = 0.0) -> Complex:
    """p (nf,) at x: p'' + k^2 p = 0 and v = i p'/(w rho) between two ends, k^2 = (w/c)^2 (1 - i eta).

    p = A cos kx + B sin kx; -v = v_0 + Y_0 p at 0 and v = v_1 + Y_1 p at the length are two equations for A and B.
    """
    (y0, v0), (y1, v1) = left, right
    k = 2 * np.pi * f / air.speed * np.sqrt(1 - 1j * eta)
    s = 1j * k / (2 * np.pi * f * air.density)
    a, b = -s * np.sin(k * length) - y1 * np.cos(k * length), s * np.cos(k * length) - y1 * np.sin(k * length)
    determinant = y0 * b - s * a
    return np.asarray(((-v0 * b - s * v1) * np.cos(k * x) + (y0 * v1 + v0 * a) * np.sin(k * x)) / determinant)


def miki(f: Floats, sigma: float, air: GivenFluid) -> tuple[Complex, Complex]:
    """rho_e and K_e (nf,) of Miki's law as printed in the header of D01: rho_e = Z_c k/w, K_e = Z_c w/k."""
    y = f / sigma
    impedance = air.density * air.speed * (1 + 0.070 * y**-0.632 - 0.107j * y**-0.632)
    speed = air.speed / (1 + 0.109 * y**-0.618 - 0.160j * y**-0.618)
    return impedance / speed, impedance * speed


def thick(f: Floats, density: complex | Complex, modulus: complex | Complex, depth: float, frame: float) -> Complex:
    """(nf, 3, 3): the state [p, v, v_b] in front of a layer from that behind, by the exponential of its equations.

    -p' = i w [rho_e (v - v_f) + rho_0 v_f],  -v' = i w p/K_e,  frame velocity v_f = v_b (`frame` = rho_0: rigid, moving with
    the backing; Biot, J. Appl. Phys. 33 (1962) 1482) or v_f = 0 (`frame` = 0: at rest, or none).
    """
    rate = np.zeros((len(f), 3, 3), dtype=np.complex128)
    rate[:, 0, 1] = density
    rate[:, 0, 2] = (frame - np.asarray(density)) if frame else 0.0
    rate[:, 1, 0] = 1 / np.asarray(modulus)
    return np.asarray(expm(2j * np.pi * f[:, None, None] * depth * rate))


def thin(f: Floats, impedance: complex | Complex, frame: float) -> Complex:
    """(nf, 3, 3): v passes, and p in front is higher than behind by Z (v - v_f)."""
    out = np.tile(np.eye(3, dtype=np.complex128), (len(f), 1, 1))
    out[:, 0, 1] = impedance
    out[:, 0, 2] = -impedance if frame else 0.0
    return out


def closed(layers: Sequence[Complex]) -> tuple[Complex, Complex]:
    """Y and u (nf,) of layers, front to back, on a backing that moves with v = v_b: v = u v_b + Y p in front."""
    whole = reduce(np.matmul, layers)
    admittance = whole[:, 1, 0] / whole[:, 0, 0]
    return admittance, whole[:, 1, 1] + whole[:, 1, 2] - admittance * (whole[:, 0, 1] + whole[:, 0, 2])


def foam(f: Floats, air: GivenFluid, sigma: float, depth: float, bonded: bool = False) -> Complex:
    """A layer of Miki's law, its frame at rest or bonded to the backing."""
    return thick(f, *miki(f, sigma, air), depth, air.density if bonded else 0.0)


def gap(f: Floats, air: GivenFluid, depth: float) -> Complex:
    """A layer of air."""
    return thick(f, air.density, air.density * air.speed**2, depth, 0.0)
