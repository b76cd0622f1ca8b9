"""Values at scan points carried to where they are needed: a local linear fit that reproduces linear fields exactly.

At x, w(x) = row of weights with sum_m w_m g(x_m) = g(x) for every linear g: moving least squares over the nearest
points (Lancaster & Salkauskas, Math. Comp. 37 (1981) 141). The points need not match the mesh.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.spatial import cKDTree

Floats = npt.NDArray[np.float64]
NEIGHBOURS = 8
REACH = 1.5
"""A place is covered when a scan point lies within this many typical spacings of it (common practice, no source)."""


@dataclass(frozen=True)
class Interpolation:
    """`weights` (k, m): values at k places from values at m points; `covered` (k,)."""

    weights: sp.csr_matrix
    covered: npt.NDArray[np.bool_]


def interpolation(points: Floats, places: Floats) -> Interpolation:
    """Weights from scan `points` (m, 3) to `places` (k, 3) [m]."""
    tree = cKDTree(points)
    count = min(NEIGHBOURS, len(points))
    distance, index = (np.asarray(found) for found in tree.query(places, k=count))
    spacing = float(np.median(np.asarray(tree.query(points, k=2)[0])[:, 1])) or 1e-12
    weights = _fit(points[index] - places[:, None, :], distance, spacing)
    rows = np.repeat(np.arange(len(places)), count)
    matrix = sp.csr_matrix((weights.ravel(), (rows, index.ravel())), shape=(len(places), len(points)))
    return Interpolation(matrix, distance[:, 0] <= REACH * spacing)


def _fit(offset: Floats, distance: Floats, spacing: float) -> Floats:
    """Weighted least squares for [1, dx, dy, dz] at the centre; flat scans leave their normal undetermined (pinv)."""
    importance = 1.0 / (distance**2 + (0.05 * spacing) ** 2)
    ones = np.ones((*offset.shape[:2], 1))
    basis = np.concatenate([ones, offset / spacing], axis=2) * np.sqrt(importance)[:, :, None]
    return np.asarray(np.linalg.pinv(basis, rcond=1e-6)[:, 0, :] * np.sqrt(importance))
