"""The faces of a tetrahedral mesh: which are outside, which tetrahedra a triangle lies on, where its normal points."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from murmesh.plugin.mesh_source import cell_keys

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
# face i lies opposite corner i, its normal out of a tetrahedron of positive volume; mid-edge nodes 01, 12, 20 follow
FACES = np.array([[1, 2, 3, 5, 9, 8], [0, 3, 2, 7, 9, 6], [0, 1, 3, 4, 8, 7], [0, 2, 1, 6, 5, 4]])


@dataclass(frozen=True, eq=False)
class Skin:
    """Faces of tets (t, 4|10) over nodes (n, 3), found by their corners."""

    nodes: Floats
    tets: Ints

    @cached_property
    def _table(self) -> tuple[npt.NDArray[np.uint64], Ints, Ints, Ints]:
        """Face keys, rising; start and count of each among the sorted faces; the sorted faces as 4 tet + local face."""
        keys = cell_keys(self.tets[:, FACES[:, :3]].reshape(-1, 3), len(self.nodes))
        order = np.argsort(keys, kind="stable")
        unique, start, count = np.unique(keys[order], return_index=True, return_counts=True)
        return unique, start, count, order

    def corners(self, faces: Ints) -> Ints:
        """Nodes (k, 3|6) of faces given as 4 tet + local face, (k,)."""
        width = 3 if self.tets.shape[1] == 4 else 6
        return np.asarray(np.take_along_axis(self.tets[faces // 4], FACES[faces % 4, :width], axis=1))

    @cached_property
    def outer(self) -> Ints:
        """Faces with one tetrahedron only, as 4 tet + local face, (k,)."""
        _, start, count, order = self._table
        return np.sort(order[start[count == 1]])

    @cached_property
    def joined(self) -> Ints:
        """Pairs of tetrahedra (k, 2) that share a face."""
        _, start, count, order = self._table
        first = start[count == 2]
        return np.stack([order[first] // 4, order[first + 1] // 4], axis=1)

    @property
    def overfull(self) -> Ints:
        """Faces that belong to more than two tetrahedra, (k,): the mesh overlaps itself there."""
        _, start, count, order = self._table
        return np.asarray(order[start[count > 2]])

    def owners(self, triangles: Ints) -> Ints:
        """The tetrahedra (m, 2) a triangle lies on; -1 where there is none."""
        owners = np.full((len(triangles), 2), -1, dtype=np.int64)
        unique, start, count, order = self._table
        if not len(unique) or not len(triangles):
            return owners
        keys = cell_keys(triangles[:, :3], len(self.nodes))
        at = np.minimum(np.searchsorted(unique, keys), len(unique) - 1)
        found = unique[at] == keys
        owners[found, 0] = order[start[at[found]]] // 4
        double = found & (count[at] >= 2)
        owners[double, 1] = order[start[at[double]] + 1] // 4
        return owners

    def centroids(self, triangles: Ints) -> Floats:
        """Mean of the corners, (m, 3)."""
        return np.asarray(self.nodes[triangles[:, :3]].mean(axis=1))

    def areas(self, triangles: Ints) -> Floats:
        """Areas of the plane triangles through the corners, (m,) [m2]."""
        return np.asarray(np.linalg.norm(self._cross(triangles), axis=1) / 2)

    def outward(self, triangles: Ints, owners: Ints) -> Floats:
        """Unit normals (m, 3) out of the first owner; the triangle's own orientation where there is none."""
        normal = self._cross(triangles)
        normal = normal / np.maximum(np.linalg.norm(normal, axis=1, keepdims=True), 1e-300)
        inside = self.nodes[self.tets[owners[:, 0], :4]].mean(axis=1) if len(self.tets) else normal
        towards = np.einsum("ij,ij->i", normal, inside - self.centroids(triangles)) > 0
        return np.asarray(np.where((towards & (owners[:, 0] >= 0))[:, None], -normal, normal))

    def _cross(self, triangles: Ints) -> Floats:
        a, b, c = (self.nodes[triangles[:, i]] for i in range(3))
        return np.asarray(np.cross(b - a, c - a))
