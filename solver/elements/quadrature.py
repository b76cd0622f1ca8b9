"""Quadrature on the triangle and the tetrahedron: Gauss-Jacobi rules of any degree on the collapsed cube.

    int_T f dV = sum_q w_q f(lambda_q),   exact for polynomials of total degree <= degree.

Source: A. H. Stroud, Approximate Calculation of Multiple Integrals (1971), section 2.4 (conical product rules);
G. E. Karniadakis and S. J. Sherwin, Spectral/hp Element Methods for CFD (2nd ed. 2005), section 4.1.1.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import numpy.typing as npt
from scipy.special import roots_jacobi

Floats = npt.NDArray[np.float64]


def _interval(n: int, alpha: int) -> tuple[Floats, Floats]:
    """Nodes and weights on (0, 1) for the weight (1 - x)^alpha."""
    x, w = roots_jacobi(n, float(alpha), 0.0)
    return 0.5 * (1.0 + x), w / 2.0 ** (alpha + 1)


def _points_per_direction(degree: int) -> int:
    return max(degree, 0) // 2 + 1


def _frozen(*arrays: Floats) -> tuple[Floats, ...]:
    for array in arrays:
        array.setflags(write=False)
    return arrays


@cache
def triangle_rule(degree: int) -> tuple[Floats, Floats]:
    """int_T f dS on the reference triangle: barycentric points (q, 3) and weights (q,) that sum to 1/2."""
    n = _points_per_direction(degree)
    (a, wa), (b, wb) = _interval(n, 1), _interval(n, 0)
    u, v = (g.ravel() for g in np.meshgrid(a, b, indexing="ij"))
    y, x = u, v * (1.0 - u)
    points, weights = _frozen(np.column_stack([1.0 - x - y, x, y]), np.outer(wa, wb).ravel())
    return points, weights


@cache
def tetrahedron_rule(degree: int) -> tuple[Floats, Floats]:
    """int_T f dV on the reference tetrahedron: barycentric points (q, 4) and weights (q,) that sum to 1/6."""
    n = _points_per_direction(degree)
    (a, wa), (b, wb), (c, wc) = (_interval(n, alpha) for alpha in (2, 1, 0))
    u, v, w = (g.ravel() for g in np.meshgrid(a, b, c, indexing="ij"))
    z = u
    y = v * (1.0 - u)
    x = w * (1.0 - u) * (1.0 - v)
    weights = (wa[:, None, None] * wb[:, None] * wc).ravel()
    points, weights = _frozen(np.column_stack([1.0 - x - y - z, x, y, z]), weights)
    return points, weights
