"""Straight and curved tetrahedra: x(lambda) = sum_n N_n(lambda) x_n, its Jacobian, and finding points.

A ten-node tetrahedron counts as curved only where a mid-edge node leaves the middle of its straight edge by more than
1e-9 of the edge; all others are treated as straight, whatever their number of nodes.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from murmesh.solver.elements.location import Locator, nearest_on_triangles
from murmesh.solver.errors import MeshError

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Bools = npt.NDArray[np.bool_]

MIDDLE_EDGES = np.array([[0, 1], [1, 2], [0, 2], [0, 3], [1, 3], [2, 3]])  # of nodes 4..9, as VTK and meshio have them
LOCAL_FACES = np.array([[1, 2, 3], [0, 2, 3], [0, 1, 3], [0, 1, 2]])  # face i lies opposite corner i
_CURVED_ABOVE = 1e-9
_FLAT_BELOW = 1e-12  # volume / (longest edge)^3 of a tetrahedron that has none
_NEWTON_STEPS = 30


def quadratic_shapes(bary: Floats) -> Floats:
    """N (..., 10): lambda_i (2 lambda_i - 1) at corners, 4 lambda_i lambda_j at mid-edge nodes."""
    edges = 4.0 * bary[..., MIDDLE_EDGES[:, 0]] * bary[..., MIDDLE_EDGES[:, 1]]
    return np.concatenate([bary * (2.0 * bary - 1.0), edges], axis=-1)


def quadratic_derivatives(bary: Floats) -> Floats:
    """dN/dlambda (..., 10, 4), the four coordinates counted as independent."""
    out = np.zeros((*bary.shape[:-1], 10, 4))
    corner, edge = np.arange(4), np.arange(6)
    out[..., corner, corner] = 4.0 * bary - 1.0
    out[..., 4 + edge, MIDDLE_EDGES[:, 0]] = 4.0 * bary[..., MIDDLE_EDGES[:, 1]]
    out[..., 4 + edge, MIDDLE_EDGES[:, 1]] = 4.0 * bary[..., MIDDLE_EDGES[:, 0]]
    return out


@dataclass(frozen=True, eq=False)
class Geometry:
    """The shapes of t tetrahedra: nodes (n, 3) in metres, tets (t, 4) straight or (t, 10) possibly curved.

    Raises: MeshError when a tetrahedron has no volume or folds over itself.
    """

    nodes: Floats
    tets: Ints

    def __post_init__(self) -> None:
        object.__setattr__(self, "nodes", np.asarray(self.nodes, dtype=np.float64))
        object.__setattr__(self, "tets", np.asarray(self.tets, dtype=np.int64))
        self._reject_flat()
        self._reject_folded()

    @cached_property
    def corners(self) -> Floats:
        """Corner coordinates (t, 4, 3)."""
        return np.asarray(self.nodes[self.tets[:, :4]])

    @cached_property
    def edge_lengths(self) -> Floats:
        """Lengths (t, 6) of the straight edges 01, 12, 02, 03, 13, 23."""
        ends = self.corners[:, MIDDLE_EDGES]
        return np.asarray(np.linalg.norm(ends[:, :, 1] - ends[:, :, 0], axis=2))

    @cached_property
    def curved(self) -> Bools:
        """(t,): which tetrahedra are truly curved."""
        if self.tets.shape[1] == 4:
            return np.zeros(len(self.tets), dtype=bool)
        straight = self.corners[:, MIDDLE_EDGES].mean(axis=2)
        away = np.linalg.norm(self.nodes[self.tets[:, 4:]] - straight, axis=2)
        return np.asarray(np.any(away > _CURVED_ABOVE * self.edge_lengths, axis=1))

    @cached_property
    def straight_jacobians(self) -> tuple[Floats, Floats]:
        """gradients (t, 4, 3) of the barycentric coordinates and |det J| (t,) of the tetrahedra through the corners."""
        columns = self.corners[:, 1:] - self.corners[:, :1]  # rows of J^T
        inverse = np.linalg.inv(columns)  # (t, 3, 3): column i is grad lambda_{i+1}
        inner = np.swapaxes(inverse, 1, 2)
        return np.concatenate([-inner.sum(axis=1, keepdims=True), inner], axis=1), np.abs(np.linalg.det(columns))

    def map(self, tet: npt.ArrayLike, bary: npt.ArrayLike) -> Floats:
        """x(lambda) (k, 3) or (k, q, 3) for tet (k,) and bary (k, 4) or (k, q, 4), in the mesh's own corner order."""
        which, lam = np.asarray(tet, dtype=np.int64), np.asarray(bary, dtype=np.float64)
        points = np.einsum("k...i,kid->k...d", lam, self.corners[which])
        bent = self.curved[which]
        if np.any(bent):
            nodes = self.nodes[self.tets[which[bent]]]
            points[bent] = np.einsum("k...n,knd->k...d", quadratic_shapes(lam[bent]), nodes)
        return np.asarray(points)

    def derivatives(self, tet: Ints, bary: Floats) -> Floats:
        """dx/dlambda (k, q, 4, 3) at bary (k, q, 4); only differences between its four rows have a meaning."""
        out = np.broadcast_to(self.corners[tet][:, None], (*bary.shape, 3)).copy()
        bent = self.curved[tet]
        if np.any(bent):
            nodes = self.nodes[self.tets[tet[bent]]]
            out[bent] = np.einsum("kqni,knd->kqid", quadratic_derivatives(bary[bent]), nodes)
        return out

    def jacobians(self, tet: Ints, bary: Floats) -> tuple[Floats, Floats]:
        """gradients (k, q, 4, 3) of the barycentric coordinates and |det J| (k, q) at bary (k, q, 4)."""
        rows = self.derivatives(tet, bary)
        columns = rows[..., 1:, :] - rows[..., :1, :]
        inner = np.swapaxes(np.linalg.inv(columns), -1, -2)
        gradients = np.concatenate([-inner.sum(axis=-2, keepdims=True), inner], axis=-2)
        return gradients, np.abs(np.linalg.det(columns))

    def locate(self, points: npt.ArrayLike) -> tuple[Ints, Floats]:
        """tet (k,) and bary (k, 4), mesh corner order, of points (k, 3); tet -1 (bary NaN) outside the mesh.

        A point counts as inside down to barycentric coordinates of -1e-9; on a shared face either side may be given.
        """
        where = np.asarray(points, dtype=np.float64).reshape(-1, 3)
        return self._locator.find(where, self._barycentric)

    def nearest_point(self, point: npt.ArrayLike) -> Floats:
        """The point (3,) of the mesh nearest to a point (3,); curved faces count as the facets through their nodes."""
        where = np.asarray(point, dtype=np.float64).reshape(3)
        if self.locate(where)[0][0] >= 0:
            return where
        triangles = self._skin
        return nearest_on_triangles(where, triangles)

    @cached_property
    def _controls(self) -> Floats:
        """Points (t, 4|10, 3) whose convex hull holds the tetrahedron: the Bezier net of a curved one."""
        if not np.any(self.curved):
            return self.corners
        middle = self.nodes[self.tets[:, 4:]]
        net = 2.0 * middle - self.corners[:, MIDDLE_EDGES].mean(axis=2)
        return np.concatenate([self.corners, net], axis=1)

    @cached_property
    def _locator(self) -> Locator:
        return Locator.build(self._controls)

    @cached_property
    def _skin(self) -> Floats:
        """Corner coordinates (m, 3, 3) of the outer faces, a curved one cut in four through its mid-edge nodes."""
        faces = np.sort(self.tets[:, LOCAL_FACES].reshape(-1, 3), axis=1)
        _, first, count = np.unique(faces, axis=0, return_index=True, return_counts=True)
        tet, local = first[count == 1] // 4, first[count == 1] % 4
        bary = np.zeros((len(tet), 6, 4))
        corner = LOCAL_FACES[local]
        k = np.arange(len(tet))
        for n, pair in enumerate(((0, 0), (1, 1), (2, 2), (0, 1), (1, 2), (2, 0))):
            for i in pair:
                bary[k, n, corner[:, i]] += 0.5
        x = self.map(tet, bary)
        return np.asarray(x[:, [[0, 3, 5], [3, 1, 4], [5, 4, 2], [3, 4, 5]]].reshape(-1, 3, 3))

    def _barycentric(self, tet: Ints, points: Floats) -> Floats:
        """bary (k, 4) of points (k, 3) in given tetrahedra, whether inside or not; NaN where Newton fails."""
        gradients, _ = self.straight_jacobians
        inner = np.einsum("kid,kd->ki", gradients[tet], points - self.corners[tet].mean(axis=1)) + 0.25
        bent = self.curved[tet]
        if np.any(bent):
            inner[bent] = self._newton(tet[bent], points[bent], inner[bent])
        return np.asarray(inner)

    def _newton(self, tet: Ints, points: Floats, start: Floats) -> Floats:
        """Solve x(lambda) = point from a start that may be far outside; NaN where it does not converge."""
        bary = np.clip(start, -0.5, 1.5)
        total = bary.sum(axis=1, keepdims=True)
        bary = np.where(total > 0, bary / np.where(total > 0, total, 1.0), 0.25)
        size = self.edge_lengths[tet].max(axis=1)
        with np.errstate(all="ignore"):
            for _ in range(_NEWTON_STEPS):
                miss = points - self.map(tet, bary)
                if np.all(np.linalg.norm(miss, axis=1) <= 1e-14 * size):
                    break
                bary = bary + self._newton_step(tet, bary, miss)
            done = np.linalg.norm(points - self.map(tet, bary), axis=1) <= 1e-12 * size
        return np.where(done[:, None], bary, np.nan)

    def _newton_step(self, tet: Ints, bary: Floats, miss: Floats) -> Floats:
        """The Newton step, limited to a change of one half in any coordinate."""
        rows = self.derivatives(tet, bary[:, None])[:, 0]
        columns = np.swapaxes(rows[:, 1:] - rows[:, :1], 1, 2)
        det = np.linalg.det(columns)
        safe = np.where((np.abs(det) > 0)[:, None, None], columns, np.eye(3))
        step = np.linalg.solve(safe, miss[..., None])[..., 0]
        step = np.concatenate([-step.sum(axis=1, keepdims=True), step], axis=1)
        largest = np.abs(step).max(axis=1, keepdims=True)
        return np.asarray(step * np.minimum(1.0, 0.5 / np.maximum(largest, 1e-300)))

    def _reject_flat(self) -> None:
        columns = self.corners[:, 1:] - self.corners[:, :1]
        volume = np.abs(np.linalg.det(columns)) / 6.0
        longest = self.edge_lengths.max(axis=1)
        bad = np.flatnonzero(~(volume > _FLAT_BELOW * longest**3))
        if len(bad):
            x = self.corners[bad[0]].mean(axis=0)
            raise MeshError(
                f"tetrahedron {bad[0]} at ({x[0]:.4g}, {x[1]:.4g}, {x[2]:.4g}) m has a volume of "
                f"{volume[bad[0]]:.3g} m^3 with edges up to {longest[bad[0]]:.3g} m; "
                f"expected a volume ({len(bad)} such tetrahedra): remesh with optimisation switched on"
            )

    def _reject_folded(self) -> None:
        """A curved tetrahedron whose det J changes sign at corners, mid-edge nodes or centre is folded."""
        bent = np.flatnonzero(self.curved)
        if not len(bent):
            return
        probes = np.vstack([np.eye(4), np.eye(4)[MIDDLE_EDGES].mean(axis=1), np.full((1, 4), 0.25)])
        rows = self.derivatives(bent, np.broadcast_to(probes, (len(bent), *probes.shape)))
        det = np.linalg.det(rows[..., 1:, :] - rows[..., :1, :])
        folded = bent[(det.min(axis=1) <= 0.0) & (det.max(axis=1) >= 0.0)]
        if len(folded):
            x = self.corners[folded[0]].mean(axis=0)
            raise MeshError(
                f"curved tetrahedron {folded[0]} at ({x[0]:.4g}, {x[1]:.4g}, {x[2]:.4g}) m folds over itself "
                f"({len(folded)} such tetrahedra); expected det J of one sign: refine the mesh on curved surfaces, "
                "switch on the mesher's high-order optimisation, or mesh with order 1"
            )
