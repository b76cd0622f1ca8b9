"""The field where pictures and files want it: points on a lattice inside every element, joined as the unknowns are joined.

A lattice of n divides a tetrahedron into n^3 and a face into n^2 flat pieces. Its points are numbered exactly as the unknowns
of order n are: neighbours share theirs, and the two sides of an opened sheet do not. Values come from the elements
themselves, never from an interpolation between nodes.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from functools import cache

import numpy as np
import numpy.typing as npt

from murmesh.solver.assembly import evaluate
from murmesh.solver.dofs import DofMap
from murmesh.solver.elements.tetrahedron import EDGES, FACES, MAX_ORDER
from murmesh.solver.space import Space

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
Ints = npt.NDArray[np.int64]
UNNAMED = -1
_MOST_TRIANGLES = 400_000  # more are no longer seen at 1400 px
_CHUNK = 50_000  # points evaluated at a time


@dataclass(frozen=True, eq=False)
class Cloud:
    """Points (k, 3) [m], each inside tetrahedron `tet` (k,) at `bary` (k, 4) of its own corners."""

    points: Floats
    tet: Ints
    bary: Floats


@dataclass(frozen=True, eq=False)
class Skin:
    """All surfaces as flat triangles (m, 3) into the cloud, normals out of the fluid; both sides of a sheet.

    `surface` (m,) is the index of the surface in the case, -1 for outer faces that no surface holds; `sign` (m,) is -1 on
    the back of a sheet.
    """

    cloud: Cloud
    triangles: Ints
    surface: Ints
    sign: Ints

    def part(self, surface: int, sign: int = 1) -> tuple[Ints, Ints]:
        """Points (k,) of one side of a surface and its triangles (m, 3) into them."""
        chosen = (self.surface == surface) & (self.sign == sign)
        used, local = np.unique(self.triangles[chosen], return_inverse=True)
        return used, local.reshape(-1, 3)


@dataclass(frozen=True, eq=False)
class Volume:
    """All tetrahedra on a lattice: `nodes` (t, lattice points) into the cloud, in the order of `lattice(n)`."""

    cloud: Cloud
    n: int
    nodes: Ints

    @property
    def flat_tets(self) -> Ints:
        """n^3 flat tetrahedra (t n^3, 4) per element, of positive volume."""
        tets = self.nodes[:, _flat_pieces(self.n)].reshape(-1, 4)
        x = self.cloud.points[tets]
        flip = np.linalg.det(x[:, 1:] - x[:, :1]) < 0
        tets[flip] = tets[flip][:, [0, 1, 3, 2]]
        return np.asarray(tets)


@cache
def lattice(n: int) -> Ints:
    """Integer weights (k, 4) of the sorted corners, summing to n: vertices, edges, faces, interior, as the unknowns stand."""
    rows = [n * np.eye(4, dtype=np.int64)[i] for i in range(4)]
    for corners in (*EDGES, *FACES, range(4)):
        for weights in _positive(n, len(corners)):
            rows.append(np.zeros(4, dtype=np.int64))
            rows[-1][list(corners)] = weights
    out = np.array(rows)
    out.setflags(write=False)
    return out


def _positive(n: int, parts: int) -> list[tuple[int, ...]]:
    """All ways to write n as `parts` positive integers."""
    return [w for w in itertools.product(range(1, n), repeat=parts) if sum(w) == n]


@cache
def _face_pieces(n: int, face: int) -> Ints:
    """n^2 triangles (n^2, 3) of lattice numbers on a sorted face, all with the normal (b - a) x (c - a)."""
    number = {tuple(row): k for k, row in enumerate(lattice(n).tolist())}

    def at(i: int, j: int) -> int:
        weights = [0] * 4
        for corner, weight in zip(FACES[face], (n - i - j, i, j), strict=True):
            weights[corner] = weight
        return number[tuple(weights)]

    up = [[at(i, j), at(i + 1, j), at(i, j + 1)] for i in range(n) for j in range(n - i)]
    down = [[at(i + 1, j), at(i + 1, j + 1), at(i, j + 1)] for i in range(n) for j in range(n - 1 - i)]
    return np.array(up + down)


@cache
def _flat_pieces(n: int) -> Ints:
    """n^3 tetrahedra (n^3, 4) of lattice numbers: walks along the three axes of n >= i >= j >= k >= 0."""
    number = {tuple(row): k for k, row in enumerate(lattice(n).tolist())}
    corners = [(i, j, k) for i in range(n) for j in range(i + 1) for k in range(j + 1)]
    pieces = []
    for start, order in itertools.product(corners, itertools.permutations(range(3))):
        walk = [np.array(start)]
        for axis in order:
            walk.append(walk[-1] + np.eye(3, dtype=np.int64)[axis])
        weights = [tuple((n - i, i - j, j - k, k)) for i, j, k in np.array(walk).tolist()]
        if all(w in number for w in weights):
            pieces.append([number[w] for w in weights])
    return np.array(pieces)


def fine_enough(faces: int) -> int:
    """Pieces per edge for a picture: as many as the lattice allows, fewer where the mesh is already fine."""
    return max(1, min(MAX_ORDER, int(np.sqrt(_MOST_TRIANGLES / max(faces, 1)))))


def sample_volume(space: Space, n: int) -> Volume:
    """Every tetrahedron on a lattice of n (1..8)."""
    tets = np.arange(len(space.case.mesh.tets))
    cloud, nodes = _cloud(space, tets, n)
    return Volume(cloud, n, nodes)


def sample_skin(space: Space, n: int = 0) -> Skin:
    """All sides of all surfaces and the unnamed rest of the outer skin, each face in n^2 triangles (0: fine enough)."""
    tet, face, surface, sign = _all_faces(space)
    n = n or fine_enough(len(tet))
    slot = np.argmax(space.topology.sorted_vertices[tet] == face[:, None], axis=1)
    used, row = np.unique(tet, return_inverse=True)
    cloud, nodes = _cloud(space, used, n)
    triangles = np.empty((len(tet), n * n, 3), dtype=np.int64)
    for s in range(4):
        chosen = slot == s
        triangles[chosen] = nodes[row[chosen]][:, _face_pieces(n, s)]
    inward = _looks_inward(space, tet, slot)
    triangles[inward] = triangles[inward][:, :, [0, 2, 1]]
    kept, local = np.unique(triangles, return_inverse=True)
    cloud = Cloud(cloud.points[kept], cloud.tet[kept], cloud.bary[kept])
    return Skin(cloud, local.reshape(-1, 3), np.repeat(surface, n * n), np.repeat(sign, n * n))


def _all_faces(space: Space) -> tuple[Ints, Ints, Ints, Ints]:
    """(tetrahedron, local face, surface, sign) of every side, then of outer faces that no surface holds (-1)."""
    tables = [np.stack([s.tet, s.face, np.full(len(s.tet), s.surface), np.full(len(s.tet), s.sign)]) for s in space.sides]
    sides = np.concatenate([np.empty((4, 0), dtype=np.int64), *tables], axis=1)
    tet, face = space.topology.boundary_sides()
    bare = ~np.isin(4 * tet + face, 4 * sides[0] + sides[1])
    count = int(bare.sum())
    rest = np.stack([tet[bare], face[bare], np.full(count, UNNAMED), np.ones(count, dtype=np.int64)])
    every = np.concatenate([sides, rest], axis=1)
    return every[0], every[1], every[2], every[3]


def _looks_inward(space: Space, tet: Ints, slot: Ints) -> npt.NDArray[np.bool_]:
    """Whether (b - a) x (c - a) of a sorted face points towards the fourth corner."""
    order = np.concatenate([FACES[slot], slot[:, None]], axis=1)
    corners = space.topology.sorted_vertices[tet[:, None], order]
    x = space.case.mesh.nodes[space.case.mesh.tets[tet[:, None], corners]]
    return np.asarray(np.linalg.det(x[:, 1:] - x[:, :1]) > 0)


def _cloud(space: Space, tets: Ints, n: int) -> tuple[Cloud, Ints]:
    """The lattice points of tetrahedra, shared where unknowns of order n are shared; and (len(tets), k) into them."""
    numbers = DofMap.build(space.topology, n).dofs_up_to(tets, n)
    _, first, nodes = np.unique(numbers, return_index=True, return_inverse=True)
    row, local = np.divmod(first, numbers.shape[1])
    tet = tets[row]
    bary = np.zeros((len(tet), 4))
    np.put_along_axis(bary, space.topology.sorted_vertices[tet], lattice(n)[local] / n, axis=1)
    points = space.geometry.map(tet, bary)
    return Cloud(points, tet, bary), nodes.reshape(numbers.shape)


def values_on(space: Space, cloud: Cloud, unknowns: Complex | Floats) -> Complex | Floats:
    """The field of `unknowns` (n,) or (n, r) at the points of a cloud, (k,) or (k, r)."""
    parts = []
    for start in range(0, len(cloud.tet), _CHUNK):
        piece = slice(start, start + _CHUNK)
        parts.append(evaluate(space.geometry, space.dofs, cloud.tet[piece], cloud.bary[piece]) @ unknowns)
    return np.concatenate(parts)
