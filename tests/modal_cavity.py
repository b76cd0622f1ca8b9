"""A box-shaped cavity in its modes, with panels that move and can be treated: choices can be enumerated in seconds.

    (A_0 + i w sum_j Y_j S_j v_j v_j^T) x = f,   A_0 = diag((w_n^2 (1 + i eta) - w^2) / (rho c^2)),   p = z^T x

v_j holds the modes' means over panel j, so every treated panel adds a rank of one. Everything is invented.
"""

from __future__ import annotations

from itertools import combinations, product

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.catalogue import Limits
from murmesh.solver.choice import Chosen
from murmesh.solver.treatment import Option

RHO, C, ETA = 1.2, 343.0, 0.06
LENGTHS = np.array([1.7, 1.5, 1.65])
KINDS = ((0.8, 9.0, 0.025), (1.5, 16.0, 0.05))
"""Mass [kg/m2], price [EUR/m2] and thickness [m] of each treatment."""
Floats = npt.NDArray[np.float64]


class Cavity:
    """Twelve panels (each wall in two), two foams of 25 and 50 mm for each; velocities at random."""

    def __init__(self, seed: int, lines: int = 47) -> None:
        rng = np.random.default_rng(seed)
        f = np.linspace(40.0, 500.0, lines)
        w, n = 2 * np.pi * f, np.array(list(product(range(7), repeat=3)))
        speed = np.pi * C * np.linalg.norm(n / LENGTHS, axis=1)
        n, speed = n[speed < 2 * np.pi * 650], speed[speed < 2 * np.pi * 650]
        norm = np.sqrt(np.prod(np.where(n > 0, 2.0, 1.0), axis=1) / np.prod(LENGTHS))
        walls = product(range(3), (0, 1), (0, 1))
        means, areas = zip(*(_panel(n, norm, axis, end, half) for axis, end, half in walls), strict=True)
        v, ear = np.array(means), norm * np.prod(np.cos(n * np.pi * np.array([0.52, 0.44, 0.71])), axis=1)
        inverse = 1 / ((speed**2 * (1 + 1j * ETA) - w[:, None] ** 2) / (RHO * C**2))
        velocity = 1e-3 * rng.uniform(0.1, 1.0, 12) * np.exp(2j * np.pi * rng.uniform(size=12)) * (95 / f)[:, None]
        drive = 1j * w[:, None] * velocity * np.array(areas)
        self.green = np.einsum("jn,fn,kn->fjk", v, inverse, v)
        self.driven = np.einsum("fjk,fk->fj", self.green, drive)
        self.heard = np.einsum("n,fn,jn->fj", ear, inverse, v)
        self.bare = np.einsum("fj,fj->f", self.heard, drive)
        foam = np.array([_foam(f, thickness) for *_, thickness in KINDS])
        self.added = 1j * w * np.array(areas)[:, None, None] * foam
        self.options = [
            Option(f"panel_{j:02d}", f"foam_{k}", area, area * mass, area * price, thickness)
            for j, area in enumerate(areas)
            for k, (mass, price, thickness) in enumerate(KINDS)
        ]

    def energy(self, chosen: Chosen) -> float:
        """Sum of |p|^2 over the lines with a set of options in place."""
        at = [i // len(KINDS) for i in chosen]
        d = np.array([self.added[i // len(KINDS), i % len(KINDS)] for i in chosen]).T.reshape(len(self.bare), -1)
        system = np.eye(len(at)) + self.green[:, at][:, :, at] * d[:, None, :]
        new = np.linalg.solve(system, self.driven[:, at, None])[..., 0]
        return float(np.sum(np.abs(self.bare - np.sum(self.heard[:, at] * d * new, axis=1)) ** 2))

    def enumerated(self, limits: Limits, most: int = 3) -> dict[Chosen, float]:
        """Gain [dB] of every set of at most `most` options within the limits on mass and cost, one per panel."""
        bare, gains = self.energy(()), {}
        for chosen in (c for size in range(most + 1) for c in combinations(range(len(self.options)), size)):
            used = [self.options[i] for i in chosen]
            light = limits.mass is None or sum(o.mass for o in used) <= limits.mass
            cheap = limits.cost is None or sum(o.cost for o in used) <= limits.cost
            if light and cheap and len({o.panel for o in used}) == len(used):
                gains[chosen] = float(10 * np.log10(bare / self.energy(chosen)))
        return gains


def _panel(n: npt.NDArray[np.int64], norm: Floats, axis: int, end: int, half: int) -> tuple[Floats, float]:
    """Mean of every mode over one half of a wall, and its area."""
    first, second = (axis + 1) % 3, (axis + 2) % 3
    mean = norm * np.where(n[:, axis] % 2, (-1.0) ** end, 1.0)
    low, high = 0.5 * half, 0.5 * (half + 1)
    order = np.maximum(n[:, first], 1) * np.pi
    mean = mean * np.where(n[:, first] > 0, (np.sin(order * high) - np.sin(order * low)) / (0.5 * order), 1.0)
    return mean * (n[:, second] == 0), float(0.5 * LENGTHS[first] * LENGTHS[second])


def _foam(f: Floats, thickness: float) -> npt.NDArray[np.complex128]:
    """Admittance of a layer on a rigid wall, Z = -i Z_c cot(k d), with Miki's law (J. Acoust. Soc. Jpn. (E) 11 (1990) 19)."""
    x = f / 12000.0
    impedance = RHO * C * (1 + 0.070 * x**-0.632 - 0.107j * x**-0.632)
    number = 2 * np.pi * f / C * (1 + 0.109 * x**-0.618 - 0.160j * x**-0.618)
    return np.asarray(1j * np.tan(number * thickness) / impedance)
