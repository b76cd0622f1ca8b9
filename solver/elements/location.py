"""Which tetrahedron holds a point: k-d trees over centroids, one per class of size, exact on graded meshes too."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.spatial import KDTree

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Barycentric = Callable[[Ints, Floats], Floats]

TOLERANCE = 1e-9  # of a barycentric coordinate
_CHUNK = 20_000  # points whose candidates are held at once


@dataclass(frozen=True)
class _SizeClass:
    """Tetrahedra whose enclosing radii lie within a factor of two."""

    tets: Ints
    radius: float
    tree: KDTree


@dataclass(frozen=True)
class Locator:
    """Centroids of all tetrahedra, the same by classes of size, and boxes (2, t, 3) that hold the tetrahedra."""

    tree: KDTree
    classes: tuple[_SizeClass, ...]
    boxes: Floats

    @staticmethod
    def build(controls: Floats) -> Locator:
        """From points (t, k, 3) whose convex hulls enclose the tetrahedra."""
        centre = controls[:, :4].mean(axis=1)
        radius = np.linalg.norm(controls - centre[:, None], axis=2).max(axis=1)
        level = np.floor(np.log2(radius / radius.max()) + 1e-12)
        groups = [np.flatnonzero(level == v) for v in np.unique(level)[::-1]]
        classes = [_SizeClass(g, float(radius[g].max()) * (1.0 + 1e-6), KDTree(centre[g])) for g in groups]
        slack = 1e-6 * radius[:, None]
        boxes = np.stack([controls.min(axis=1) - slack, controls.max(axis=1) + slack])
        return Locator(KDTree(centre), tuple(classes), boxes)

    def find(self, points: Floats, barycentric: Barycentric) -> tuple[Ints, Floats]:
        """tet (k,), bary (k, 4); -1 and NaN outside: first by the eight nearest centroids, then by all in reach."""
        tet, bary = np.full(len(points), -1, dtype=np.int64), np.full((len(points), 4), np.nan)
        for start in range(0, len(points), _CHUNK):
            part = slice(start, start + _CHUNK)
            tet[part], bary[part] = self._find_chunk(points[part], barycentric)
        return tet, bary

    def _find_chunk(self, points: Floats, barycentric: Barycentric) -> tuple[Ints, Floats]:
        best = _Best(points, barycentric, self.boxes)
        count = min(8, self.tree.n)
        near = np.asarray(self.tree.query(points, k=count)[1]).reshape(len(points), count)
        for column in near.T:
            left = np.flatnonzero(~best.inside)
            best.offer(left, column[left])
        for group in self.classes:
            left = np.flatnonzero(~best.inside)
            if len(left):
                self._search(group, left, best)
        outside = ~best.inside
        best.tet[outside], best.bary[outside] = -1, np.nan
        return best.tet, best.bary

    @staticmethod
    def _search(group: _SizeClass, left: Ints, best: _Best) -> None:
        found = [np.asarray(f, dtype=np.int64) for f in group.tree.query_ball_point(best.points[left], group.radius)]
        counts = np.array([len(f) for f in found])
        candidates = np.concatenate(found)
        best.offer(np.repeat(left, counts), group.tets[candidates])


class _Best:
    """The tetrahedron with the largest smallest barycentric coordinate offered so far, for each point."""

    def __init__(self, points: Floats, barycentric: Barycentric, boxes: Floats) -> None:
        self.points = points
        self.barycentric = barycentric
        self.boxes = boxes
        self.tet = np.full(len(points), -1, dtype=np.int64)
        self.bary = np.full((len(points), 4), -np.inf)

    @property
    def inside(self) -> npt.NDArray[np.bool_]:
        return np.asarray(self.bary.min(axis=1) >= -TOLERANCE)

    def offer(self, which: Ints, tets: Ints) -> None:
        """Try tetrahedra for points; `which` may repeat a point. Boxes first: curved tetrahedra are dear to ask."""
        low, high = self.boxes[:, tets]
        held = np.all((self.points[which] >= low) & (self.points[which] <= high), axis=1)
        which, tets = which[held], tets[held]
        if not len(which):
            return
        bary = self.barycentric(tets, self.points[which])
        score = np.nan_to_num(bary.min(axis=1), nan=-np.inf)
        order = np.lexsort((score, which))  # the best candidate of each point comes last
        last = order[np.append(which[order][1:] != which[order][:-1], True)]
        better = last[score[last] > self.bary[which[last]].min(axis=1)]
        self.tet[which[better]] = tets[better]
        self.bary[which[better]] = bary[better]


def nearest_on_triangles(point: Floats, triangles: Floats) -> Floats:
    """The point (3,) of triangles (m, 3, 3) nearest to a point (3,).

    The foot on the plane where it falls inside, else the nearest point of the three edges.
    """
    a, u, v = triangles[:, 0], triangles[:, 1] - triangles[:, 0], triangles[:, 2] - triangles[:, 0]
    uu, uv, vv = (np.einsum("md,md->m", p, q) for p, q in ((u, u), (u, v), (v, v)))
    wu, wv = (np.einsum("md,md->m", point - a, q) for q in (u, v))
    det = np.maximum(uu * vv - uv * uv, 1e-300)
    s, t = (vv * wu - uv * wv) / det, (uu * wv - uv * wu) / det
    inside = (s >= 0) & (t >= 0) & (s + t <= 1)
    feet = [(a + s[:, None] * u + t[:, None] * v)[inside]]
    for i, j in ((0, 1), (1, 2), (2, 0)):
        start, along = triangles[:, i], triangles[:, j] - triangles[:, i]
        length2 = np.maximum(np.einsum("md,md->m", along, along), 1e-300)
        share = np.clip(np.einsum("md,md->m", point - start, along) / length2, 0.0, 1.0)
        feet.append(start + share[:, None] * along)
    every = np.concatenate(feet)
    return np.asarray(every[np.argmin(np.linalg.norm(every - point, axis=1))])
