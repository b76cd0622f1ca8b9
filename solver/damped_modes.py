"""Damped modes: complex frequencies at which the air rings by itself, with every loss of the case.

    Q(w) p = 0,   Q(w) = sum_j w^n_j g_j A_j,   g_j = phi_j(f) / (2 pi f)^n_j,   n = 0 (K), 1 (walls), 2 (M)

    f = Re f + i Im f,  e^{iwt}: a mode dies out with Im f > 0,  T60 = ln(1000) / (2 pi Im f),  loss factor 2 Im f / |f|

Laws are known at real frequencies, so each g_j is held at one and the quadratic eigenproblem is solved nearest to a shift s,

    theta [x1; x2] = [-Q(s)^-1 (Q'(s) x1 + Q_2 x2); x1],   w = s + 1/theta      (shift-inverted companion form, Arnoldi)

(F. Tisseur and K. Meerbergen, SIAM Review 43 (2001) 235; cited from memory). Then the laws are taken at each mode's own
real frequency and the mode is followed by inverse iteration with the Rayleigh functional, x^T Q(w) x = 0, until it stays.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import scipy.sparse.linalg as spla

from murmesh.solver.case.model import Case
from murmesh.solver.engine import Engine
from murmesh.solver.errors import CaseError, SolveError
from murmesh.solver.modes import peaks
from murmesh.solver.receiver_points import locate_receivers
from murmesh.solver.space import Space, discretise
from murmesh.solver.system import System, build_system

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
STEPS = 25
CLOSE = 1e-10
"""Relative change of a frequency (of one not below 1 rad/s) at which it stays."""
STILL = 0.1
"""Frequencies w [rad/s] below which a mode is the uniform pressure at rest, which is left out."""


@dataclass(frozen=True, eq=False)
class DampedModes:
    """Complex frequencies (m,) [Hz], nearest first, and shapes (unknowns, m) on `space`, scaled to a largest value of 1.

    `held` (m,) tells where Re f lies outside the sweep, so that the laws were held at the end of the band.
    """

    space: Space
    frequencies: Complex
    shapes: Complex
    held: npt.NDArray[np.bool_]

    @property
    def loss_factors(self) -> Floats:
        """2 Im f / |f|, (m,)."""
        return np.asarray(2 * self.frequencies.imag / np.maximum(np.abs(self.frequencies), 1e-300))

    @property
    def reverberation_times(self) -> Floats:
        """T60 = ln(1000) / (2 pi Im f) [s], (m,); inf without a loss."""
        rate = 2 * np.pi * self.frequencies.imag
        return np.asarray(np.where(rate > 0, np.log(1000.0) / np.where(rate > 0, rate, 1.0), np.inf))


def damped_modes(case: Case, count: int, near: float = 0.0, order: int = 0) -> DampedModes:
    """The `count` damped modes nearest to the frequency `near` [Hz] in the complex plane, with Re f >= 0.

    Raises: CaseError for a case that radiates outside, whose operator has no modes of its own, or more modes than
    unknowns; SolveError where a mode does not settle.
    """
    space = discretise(case, order)
    system = build_system(space, locate_receivers(case, space.geometry))
    if not system.symmetric:
        raise CaseError("damped modes are asked of a case that radiates outside, which has none; close the surface")
    problem = _Problem(system, Engine.of(system))
    start = max(near, 1.0)
    if not 0 < count < int(problem.engine.free.sum()) - 1:
        raise CaseError(f"{count} modes are asked of {int(problem.engine.free.sum())} unknowns; ask for fewer")
    found = [problem.settled(w, x) for w, x in problem.nearest(2 * np.pi * start, count)]
    chosen = _distinct(found, near)[:count]
    frequencies = np.array([w for w, _ in chosen], dtype=np.complex128) / (2 * np.pi)
    shapes = np.zeros((system.size, len(chosen)), dtype=np.complex128)
    shapes[problem.engine.free] = np.column_stack([x for _, x in chosen])
    low, high = problem.band
    return DampedModes(space, frequencies, shapes / _largest(space, shapes), _outside(frequencies.real, low, high))


def _outside(f: Floats, low: float, high: float) -> npt.NDArray[np.bool_]:
    return np.asarray((f < low) | (f > high))


def _largest(space: Space, shapes: Complex) -> Complex:
    """The largest values: their size over elements, their phase at the vertices, (m,)."""
    vertices = shapes[: space.topology.n_vertices]
    at = np.abs(vertices).argmax(axis=0)
    value = vertices[at, np.arange(shapes.shape[1])]
    return np.asarray(peaks(space, shapes) * value / np.maximum(np.abs(value), 1e-300))


@dataclass(frozen=True, eq=False)
class _Problem:
    """Q(w) of one system."""

    system: System
    engine: Engine

    @property
    def band(self) -> tuple[float, float]:
        lines = self.system.space.case.sweep.frequencies
        return float(lines[0]), float(lines[-1])

    def held_laws(self, w: complex) -> Complex:
        """g_j (terms,) at the real frequency of w, inside the sweep."""
        f = np.clip([w.real / (2 * np.pi)], *self.band)
        return np.asarray(self.system.coefficients(f)[0] / (2 * np.pi * f[0]) ** self.powers)

    @property
    def powers(self) -> npt.NDArray[np.int64]:
        return np.array([term.power for term in self.system.terms])

    def at(self, w: complex, g: Complex, derivative: int = 0) -> Complex:
        """Coefficients of Q(w), Q'(w) or Q_2 = Q''/2."""
        n = self.powers
        factor = (np.ones(len(n)), n, n * (n - 1) / 2)[derivative]
        return np.asarray(g * factor * w ** np.maximum(n - derivative, 0))

    def nearest(self, shift: complex, count: int) -> list[tuple[complex, Complex]]:
        """The w nearest to a shift, with the laws held there; two more than asked, as settling may reorder them."""
        shift = shift * (1 + 0.003j)  # never exactly on a mode
        g = self.held_laws(shift)
        matrix = self.system.matrix
        factor = self.engine.factor(matrix(self.at(shift, g)))
        slope, curve = (self.engine.inner(matrix(self.at(shift, g, d))) for d in (1, 2))
        n = int(self.engine.free.sum())

        def step(x: Complex) -> Complex:
            one, two = x[:n, None], x[n:, None]
            return np.concatenate([-factor.solve(slope @ one + curve @ two)[:, 0], x[:n]])

        wanted = min(count + count // 2 + 4, 2 * n - 2)
        companion = spla.LinearOperator((2 * n, 2 * n), matvec=step, dtype=np.complex128)
        while True:
            theta, vectors = spla.eigs(companion, wanted, which="LM", v0=np.ones(2 * n, dtype=np.complex128))
            w = shift + 1 / theta
            # w and -conj(w) come in pairs
            kept = np.flatnonzero((w.real >= -1e-6 * abs(shift)) & (np.abs(w) > STILL))
            kept = kept[np.argsort(np.abs(w[kept] - shift))][: count + 2]
            if len(kept) >= count or wanted == 2 * n - 2:
                return [(complex(w[i]), vectors[:n, i] / np.linalg.norm(vectors[:n, i])) for i in kept]
            wanted = min(2 * wanted, 2 * n - 2)

    def settled(self, w: complex, x: Complex) -> tuple[complex, Complex]:
        """The mode with the laws at its own real frequency."""
        for _ in range(STEPS):
            g = self.held_laws(w)
            before = w
            w = w + self._correction(w, g, x)
            if abs(w - before) <= CLOSE * max(abs(w), 1.0):
                return w, x
            matrix = self.system.matrix(self.at(w, g))
            slope = self.engine.inner(self.system.matrix(self.at(w, g, 1)))
            x = self.engine.factor(matrix).solve((slope @ x)[:, None])[:, 0]
            x = x / np.linalg.norm(x)
        raise SolveError(
            f"the damped mode near {w.real / 2 / np.pi:.4g} Hz does not settle in {STEPS} steps: a law changes too fast "
            "there; smooth its table, or look around another frequency"
        )

    def _correction(self, w: complex, g: Complex, x: Complex) -> complex:
        """The small d with x^T Q(w + d) x = 0."""
        forms = [x @ (self.engine.inner(self.system.matrix(self.at(w, g, d))) @ x) for d in (0, 1, 2)]
        c, b, a = (complex(form) for form in forms)
        root = np.sqrt(b * b - 4 * a * c + 0j)
        return complex(-2 * c / max(b + root, b - root, key=abs))


def _distinct(found: list[tuple[complex, Complex]], near: float) -> list[tuple[complex, Complex]]:
    """Nearest first; two that settled on one mode count once."""
    kept: list[tuple[complex, Complex]] = []
    for w, x in sorted(found, key=lambda mode: abs(mode[0] / (2 * np.pi) - near)):
        same = [y for v, y in kept if abs(v - w) < 1e-6 * max(abs(w), 1.0)]
        if all(abs(np.vdot(x, y)) < 0.999 for y in same):
            kept.append((w, x))
    return kept
