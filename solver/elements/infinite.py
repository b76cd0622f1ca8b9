"""Conjugated infinite elements (R. J. Astley, G. J. Macaulay, J.-P. Coyette and L. Cremers, JASA 103 (1998) 49, from memory).

Outside a surface that is star-shaped about x_c, x = x_c + s (x_b - x_c) with s >= 1, R = |x_b - x_c|, mu = (s - 1) R:

    trial N(x_b) f(s) e^{-ik mu},   test s^-2 N(x_b) f(s) e^{+ik mu}
    f_0 = 1/s,  f_j = (1/s) (1 - 1/s) P^(1,1)_{j-1}(1 - 2/s)          (Jacobi; f_0 alone lives on the surface)

    K = int grad(s^-2 q) . grad p dV,   C = int s^-2 q grad mu . grad p - p grad mu . grad(s^-2 q) dV
    M = int s^-2 q p (1 - |grad mu|^2) dV,   A = K + ik C - k^2 M

With n the normal of the surface, r = x_b - x_c, h = n . r, G = the surface gradient of N and w = G . r, the volume integrals
are sums of (integral over the surface) x (integral over s), for any trace functions N:

    K = S1 x T0 + S3^T x T1 + S3 x T2 + S2 x T3,   C = S4 x T4 + S5 x (T1 - T2) + (S6^T - S6) x T0,   M = -S7 x T0
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
import numpy.typing as npt
from numpy.polynomial.legendre import leggauss
from scipy.special import eval_jacobi

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]


def radial_functions(count: int, t: Floats) -> tuple[Floats, Floats]:
    """f_j and df_j/dt (q, count) at t = 1/s (q,)."""
    bubble, slope = t * (1.0 - t), 1.0 - 2.0 * t
    values, slopes = [t], [np.ones_like(t)]
    for m in range(count - 1):
        jacobi = eval_jacobi(m, 1, 1, slope)
        d_jacobi = -(m + 3.0) * eval_jacobi(m - 1, 2, 2, slope) if m else np.zeros_like(t)
        values.append(bubble * jacobi)
        slopes.append(slope * jacobi + bubble * d_jacobi)
    return np.stack(values, axis=1), np.stack(slopes, axis=1)


@dataclass(frozen=True)
class Radial:
    """T0 .. T4 (N, N): row of the test, column of the trial function; without unit."""

    t0: Floats
    t1: Floats
    t2: Floats
    t3: Floats
    t4: Floats


@cache
def radial_matrices(count: int) -> Radial:
    """The integrals over s of `count` functions, exact: with t = 1/s they are integrals of polynomials over 0..1."""
    x, weights = leggauss(count + 2)
    t = 0.5 * (x + 1.0)
    f, df = radial_functions(count, t)
    g = 2.0 * t[:, None] * f + t[:, None] ** 2 * df  # d(t^2 f)/dt

    def over_s(test: Floats, trial: Floats, power: int) -> Floats:
        return np.asarray((test * (0.5 * weights * t**power)[:, None]).T @ trial)

    t4 = over_s(g, f, -2) - over_s(f, df, 0)
    return Radial(over_s(f, f, 0), over_s(f, df, 1), over_s(g, f, -1), over_s(g, df, 0), t4)


@dataclass(frozen=True)
class SurfaceForms:
    """S1 .. S7 (..., n, n) of trace functions on the surface."""

    s1: Floats
    s2: Floats
    s3: Floats
    s4: Floats
    s5: Floats
    s6: Floats
    s7: Floats


def surface_forms(values: Floats, gradients: Floats, arms: Floats, normals: Floats, weights: Floats) -> SurfaceForms:
    """The seven forms (m, n, n) on m faces.

    values N (q, n), gradients G (m, q, n, 3) [1/m], arms r (m, q, 3) [m], normals (m, q, 3), weights (m, q) [m2].
    """
    radius = np.linalg.norm(arms, axis=2)
    h = np.einsum("mqd,mqd->mq", arms, normals)
    along = np.matmul(gradients, arms[..., None])[..., 0]  # w (m, q, n)

    def mass(factor: Floats) -> Floats:
        return np.asarray(np.matmul(values.T, (weights * factor)[..., None] * values))

    def slant(factor: Floats) -> Floats:
        return np.asarray(np.matmul(values.T, (weights * factor)[..., None] * along))

    flat = np.einsum("mq,mqad,mqbd->mab", weights * h, gradients, gradients, optimize=True)
    s1 = flat + np.matmul(along.transpose(0, 2, 1), (weights / h)[..., None] * along)
    return SurfaceForms(
        s1,
        mass(1.0 / h),
        slant(1.0 / h),
        mass(h / radius),
        mass(h / radius - radius / h),
        slant(radius / h),
        mass(radius**2 / h - h),
    )


def scaled_condition(matrix: Complex) -> Floats:
    """2-norm condition numbers (...) of D^-1/2 A D^-1/2, D = |diag A|, of matrices (..., N, N)."""
    scale = 1.0 / np.sqrt(np.abs(np.diagonal(matrix, axis1=-2, axis2=-1)))
    return np.asarray(np.linalg.cond(matrix * scale[..., :, None] * scale[..., None, :]))


def sphere_radial_matrix(count: int, n: int, ka: float) -> Complex:
    """A (N, N) [m] of a spherical harmonic of order n on the unit sphere: n (n + 1) T0 + T3 + i ka T4."""
    radial = radial_matrices(count)
    return np.asarray(n * (n + 1) * radial.t0 + radial.t3 + 1j * ka * radial.t4)
