"""The sound outside an envelope: Kirchhoff-Helmholtz integral, far field, directivity, radiated power.

    p(x) = int [ p dG/dn - G dp/dn ] dS,   G = e^{-ikr} / (4 pi r),   n out of the envelope (into the outside)
    p(x) -> F(d) e^{-ik|x|} / |x|,   with e^{ik d.y} / (4 pi) in the place of G     (x and y from the centre)

A ground plane adds the images of G with its sign. The flux is not differentiated: G is projected onto the trace functions,
g = B^{-1} int N G dS, and int G dp/dn dS = -g^T A_out u is what the infinite elements themselves balance; it converges as
fast as energies do.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
import scipy.sparse.linalg as spla
from numpy.polynomial.legendre import leggauss

from murmesh.solver.envelope import Envelope
from murmesh.solver.faces import FacePoints

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
Kernel = Callable[[Floats, Floats], tuple[Complex, Complex]]
"""Points (q, 3) and normals (q, 3) of the surface -> G and dG/dn, both (k, q)."""

_DEGREE, _NEAR_DEGREE = 10, 30
"""Added degree of the rule; degree where a point lies nearer to the surface than the largest face is long."""


def point_kernel(x: Floats, k: complex) -> Kernel:
    """G and dG/dn of points x (k, 3): e^{-ikr} / (4 pi r)."""

    def of(y: Floats, n: Floats) -> tuple[Complex, Complex]:
        away = y[None] - x[:, None]
        r = np.linalg.norm(away, axis=2)
        g = np.exp(-1j * k * r) / (4 * np.pi * r)
        along = np.einsum("kqd,qd->kq", away, n) / r
        return g, -(1j * k + 1.0 / r) * g * along

    return of


def far_kernel(directions: Floats, k: complex, centre: Floats) -> Kernel:
    """G and dG/dn of unit directions (k, 3): e^{ik d.(y - x_c)} / (4 pi)."""

    def of(y: Floats, n: Floats) -> tuple[Complex, Complex]:
        g = np.exp(1j * k * (directions @ (y - centre).T)) / (4 * np.pi)
        return g, 1j * k * (directions @ n.T) * g

    return of


@dataclass(frozen=True, eq=False)
class Exterior:
    """The outside of one envelope; `size` is the number of all unknowns of the system."""

    envelope: Envelope
    size: int

    @cached_property
    def matrices(self) -> tuple[sp.csr_matrix, sp.csr_matrix, sp.csr_matrix]:
        """K, C, M of the infinite elements, (size, size)."""
        return self.envelope.matrices(self.size)

    def operator(self, k: complex) -> sp.csr_matrix:
        """K + ikC - k^2 M: rho A_out."""
        stiffness, wave, mass = self.matrices
        return stiffness + 1j * k * wave - k * k * mass

    def pressure_rows(self, points: Floats, k: complex) -> Complex:
        """Rows (m, size) with p(x) = row . u at points (m, 3) outside."""
        return self._rows(lambda at: point_kernel(at, k), np.atleast_2d(points), k, self._degree(points))

    def far_rows(self, directions: Floats, k: complex) -> Complex:
        """Rows (m, size) with F(d) = row . u [Pa m] for unit directions (m, 3) from the centre."""
        unit = np.atleast_2d(directions) / np.linalg.norm(np.atleast_2d(directions), axis=1, keepdims=True)
        centre = self.envelope.centre
        degree = 2 * self.envelope.dofs.max_order + _DEGREE
        return self._rows(lambda at: far_kernel(at, k, centre), unit, k, degree, directions=True)

    def _rows(self, kernel: Callable[[Floats], Kernel], x: Floats, k: complex, degree: int, *, directions: bool = False) -> Complex:
        env = self.envelope
        at, traces = self._quadrature(degree)
        y, n, weights = at.points.reshape(-1, 3), at.normals.reshape(-1, 3), at.weights.ravel()
        g, slope = kernel(x)(y, n)
        if env.ground is not None:
            image = env.ground.mirror(np.zeros(3) if directions else env.centre, x)
            g_image, slope_image = kernel(image)(y, n)
            g, slope = g + env.ground.sign * g_image, slope + env.ground.sign * slope_image
        double = (slope * weights) @ traces
        free = ~env.held
        projected = np.zeros((len(env.trace), len(x)), dtype=np.complex128)
        projected[free] = self._project(traces[:, free].T @ (g * weights).T)
        rows = np.asarray((self.operator(k).T[:, env.trace] @ projected).T)
        rows[:, env.trace] += double
        return rows

    def _project(self, moments: Complex) -> Complex:
        return np.asarray(self._mass_factor.solve(moments.real) + 1j * self._mass_factor.solve(moments.imag))

    @cached_property
    def _mass_factor(self) -> spla.SuperLU:
        free = ~self.envelope.held
        return spla.splu(self.envelope.mass[free][:, free].tocsc())

    def _degree(self, points: Floats) -> int:
        near = np.linalg.norm(self._quadrature(4)[0].points.reshape(-1, 1, 3) - np.atleast_2d(points), axis=2).min()
        usual = 2 * self.envelope.dofs.max_order + _DEGREE
        return usual if near > self._longest else max(usual, _NEAR_DEGREE)

    @cached_property
    def _longest(self) -> float:
        return float(self.envelope.geometry.edge_lengths[self.envelope.tet].max())

    def _quadrature(self, degree: int) -> tuple[FacePoints, sp.csr_matrix]:
        held: dict[int, tuple[FacePoints, sp.csr_matrix]] = self._rules
        if degree not in held:
            held[degree] = self.envelope.points(degree)
        return held[degree]

    @cached_property
    def _rules(self) -> dict[int, tuple[FacePoints, sp.csr_matrix]]:
        return {}

    def surface_power(self, field: Complex, k: complex, rho_omega: complex) -> float:
        """W = Re int p conj(v_n) dS / 2 [W] of a field u (size,): the power through the surface; rho_omega = rho w."""
        flux = -(self.operator(k)[self.envelope.trace] @ field)  # int N_a dp/dn dS
        velocity = 1j * flux / rho_omega  # v_n = i/(rho w) dp/dn
        return float(0.5 * np.real(np.vdot(velocity, field[self.envelope.trace])))

    def far_power(self, field: Complex, k: float, impedance: float, points: int = 0) -> float:
        """W = int |F|^2 dOmega / (2 rho c) [W] over the sphere, or over the half space above a ground plane."""
        count = points or int(np.ceil(2 * k * self.envelope.largest_radius)) + 12
        directions, weights = sphere_rule(count)
        if self.envelope.ground is not None:
            weights = 0.5 * weights  # images make the pattern even about the plane
        pattern = self.far_rows(directions, k) @ field
        return float(np.sum(weights * np.abs(pattern) ** 2) / (2 * impedance))

    def directivity_index(self, field: Complex, directions: Floats, k: float) -> Floats:
        """DI = 10 lg(4 pi |F(d)|^2 / int |F|^2 dOmega) [dB] for directions (m, 3); above a ground plane the integral is
        over the half space, so that a small source on a rigid floor has 3 dB."""
        total = 2.0 * self.far_power(field, k, 1.0)
        return np.asarray(10 * np.log10(4 * np.pi * np.abs(self.far_rows(directions, k) @ field) ** 2 / total))


def sphere_rule(count: int) -> tuple[Floats, Floats]:
    """Directions (2 count^2, 3) and weights that sum to 4 pi; exact for spherical harmonics up to order 2 count - 1."""
    z, w = leggauss(count)
    angle = np.pi * (np.arange(2 * count) + 0.5) / count
    s = np.sqrt(1.0 - z**2)
    x = np.stack([np.outer(s, np.cos(angle)), np.outer(s, np.sin(angle)), np.outer(z, np.ones(2 * count))], axis=2)
    return x.reshape(-1, 3), np.repeat(w * np.pi / count, 2 * count)
