"""Who touches whom in a tetrahedral mesh: entity numbers, neighbours, and inner surfaces opened in the numbering.

An inner two-sided surface is not cut out of the mesh.  Around every vertex, edge and face that touches it, the
tetrahedra that can only be joined by crossing an open face receive separate entity numbers, so that the pressure may
jump there and stays continuous around the rim.  A face on the surface is always split in two.  Orientation follows the
mesh's own vertex numbers, hence the two sides of a split entity carry the same functions.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

from murmesh.solver.elements.tetrahedron import EDGES, FACE_EDGES, FACES
from murmesh.solver.errors import MeshError

Ints = npt.NDArray[np.int64]
Bools = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class _FaceTable:
    """The faces of the mesh before any opening, found by their corner numbers."""

    edge_keys: Ints  # (e,) ascending, low * n + high
    face_keys: Ints  # (f,) ascending, (edge number of the two lowest corners) * n + highest
    size: int
    tet: Ints  # (f, 2) the one or two tetrahedra, -1 for none
    slot: Ints  # (f, 2) the sorted local face in each

    def find(self, triangles: Ints) -> Ints:
        """Face numbers (m,) of corner triples (m, 3), -1 where the triple is no face."""
        corners = np.sort(triangles, axis=1)
        edge = _lookup(self.edge_keys, corners[:, 0] * self.size + corners[:, 1])
        face = _lookup(self.face_keys, edge * self.size + corners[:, 2])
        inside = (edge >= 0) & (corners[:, 0] >= 0) & (corners[:, 2] < self.size)
        return np.where(inside, face, -1)


@dataclass(frozen=True)
class Topology:
    """Entity numbers of a mesh of t tetrahedra.

    sorted_vertices (t, 4)   local corners in ascending mesh number: sorted corner i is corner sorted_vertices[:, i]
    tet_vertex_ids (t, 4)    vertex numbers of the *sorted* corners, 0..n_vertices-1
    tet_edge_ids (t, 6)      edges 01, 02, 03, 12, 13, 23 of the sorted corners
    tet_face_ids (t, 4)      face i lies opposite sorted corner i
    vertex_nodes (n_vertices,)  the mesh node of each vertex (two vertices share a node where a surface is open)
    face_tets, face_slots (n_mesh_faces, 2)  the one or two (tet, sorted local face) of each mesh face, -1 for none
    open_faces (k,)          mesh faces (rows of face_tets) that are open
    """

    sorted_vertices: Ints
    tet_vertex_ids: Ints
    tet_edge_ids: Ints
    tet_face_ids: Ints
    n_vertices: int
    n_edges: int
    n_faces: int
    vertex_nodes: Ints
    open_faces: Ints
    _faces: _FaceTable

    @staticmethod
    def build(tets: npt.ArrayLike, open_faces: npt.ArrayLike | None = None) -> Topology:
        """Number the entities of tets (t, 4|10); open_faces (m, 3+) are corner triples of inner faces to be opened.

        Raises: MeshError when a tetrahedron repeats a corner, a face belongs to more than two tetrahedra, or an open
        face is not an inner face of the mesh.
        """
        corners = _corners(tets)
        order = np.argsort(corners, axis=1, kind="stable")
        ascending = np.take_along_axis(corners, order, axis=1)
        nodes, vertices, edges, faces, table = _number(ascending)
        opened = _find_open(table, open_faces)
        counts = [len(nodes), len(table.edge_keys), len(table.face_keys)]
        ids = [vertices, edges, faces]
        vertex_nodes = nodes
        if len(opened):
            ids, counts, origins = _open(ids, counts, table, opened)
            vertex_nodes = nodes[origins[0]]
        return Topology(order, ids[0], ids[1], ids[2], counts[0], counts[1], counts[2], vertex_nodes, opened, table)

    @property
    def n_tets(self) -> int:
        """Number of tetrahedra."""
        return len(self.sorted_vertices)

    @property
    def face_tets(self) -> Ints:
        """(n_mesh_faces, 2): the tetrahedra of every mesh face, -1 where there is no second one."""
        return self._faces.tet

    @property
    def face_slots(self) -> Ints:
        """(n_mesh_faces, 2): the sorted local face in each of `face_tets`."""
        return self._faces.slot

    def sides_of(self, triangles: npt.ArrayLike) -> tuple[Ints, Ints]:
        """tet (m, 2) and local_face (m, 2) of triangles (m, 3+); -1 where there is no second tetrahedron.

        Local face i lies opposite the tetrahedron's own corner i; of two sides the lower tetrahedron comes first.
        Raises: MeshError when a triangle is a face of no tetrahedron.
        """
        triples = _triples(triangles)
        face = self._faces.find(triples)
        _require_faces(face, triples, "give the surface the same mesh as the volume")
        tet, slot = self._faces.tet[face], self._faces.slot[face]
        local = self.sorted_vertices[tet, slot]
        return tet, np.where(tet < 0, -1, local)

    def boundary_sides(self) -> tuple[Ints, Ints]:
        """tet (m,) and local_face (m,) of every face with one tetrahedron only: the outer skin."""
        single = self._faces.tet[:, 1] < 0
        tet = self._faces.tet[single, 0]
        return tet, self.sorted_vertices[tet, self._faces.slot[single, 0]]


def _corners(tets: npt.ArrayLike) -> Ints:
    table = np.asarray(tets, dtype=np.int64)
    if table.ndim != 2 or table.shape[1] not in (4, 10) or not len(table):
        raise MeshError(f"tetrahedra of shape {table.shape} were given; expected (t, 4) or (t, 10) with t >= 1")
    corners = table[:, :4]
    ascending = np.sort(corners, axis=1)
    bad = np.flatnonzero(np.any(ascending[:, 1:] == ascending[:, :-1], axis=1))
    if len(bad):
        raise MeshError(
            f"tetrahedron {bad[0]} repeats a corner: {corners[bad[0]].tolist()}; "
            f"expected four different nodes ({len(bad)} such tetrahedra): remesh or remove them"
        )
    return np.asarray(corners)


def _triples(triangles: npt.ArrayLike) -> Ints:
    """Corner triples (m, 3) of triangles (m, 3+)."""
    table = np.asarray(triangles, dtype=np.int64)
    if not table.size:
        return np.zeros((0, 3), dtype=np.int64)
    if table.ndim != 2 or table.shape[1] < 3:
        raise MeshError(f"triangles of shape {table.shape} were given; expected (m, 3) or (m, 6) node numbers")
    return np.asarray(table[:, :3])


def _number(ascending: Ints) -> tuple[Ints, Ints, Ints, Ints, _FaceTable]:
    """Mesh nodes in use and the vertex, edge and face numbers of every tetrahedron."""
    size = int(ascending.max()) + 1
    nodes = np.unique(ascending)
    vertices = np.searchsorted(nodes, ascending)
    pairs = ascending[:, EDGES]
    edge_keys, edges = np.unique(pairs[..., 0] * size + pairs[..., 1], return_inverse=True)
    edges = edges.reshape(-1, 6)
    first_edge = edges[:, FACE_EDGES[:, 0]]
    face_keys, faces = np.unique(first_edge * size + ascending[:, FACES[:, 2]], return_inverse=True)
    faces = faces.reshape(-1, 4)
    tet, slot = _face_sides(faces, len(face_keys))
    return nodes, vertices, edges, faces, _FaceTable(edge_keys, face_keys, size, tet, slot)


def _face_sides(faces: Ints, n_faces: int) -> tuple[Ints, Ints]:
    """The one or two (tetrahedron, sorted local face) of each face, the lower tetrahedron first."""
    flat = faces.ravel()
    order = np.argsort(flat, kind="stable")
    count = np.bincount(flat, minlength=n_faces)
    if count.max() > 2:
        worst = int(np.argmax(count))
        tets = np.flatnonzero(np.any(faces == worst, axis=1))
        raise MeshError(
            f"tetrahedra {tets.tolist()} share one face; expected at most two per face: the mesh overlaps itself, "
            "remove duplicate volumes (for instance by fragmenting the geometry) and remesh"
        )
    start = np.concatenate([[0], np.cumsum(count)[:-1]])
    sides = np.full((n_faces, 2), -1, dtype=np.int64)
    sides[:, 0] = order[start]
    double = count == 2
    sides[double, 1] = order[start[double] + 1]
    return np.where(sides < 0, -1, sides // 4), np.where(sides < 0, -1, sides % 4)


def _lookup(keys: Ints, wanted: Ints) -> Ints:
    """Positions of wanted in the ascending keys, -1 where absent."""
    at = np.minimum(np.searchsorted(keys, wanted), len(keys) - 1)
    return np.where(keys[at] == wanted, at, -1)


def _require_faces(found: Ints, triples: Ints, cure: str) -> None:
    bad = np.flatnonzero(found < 0)
    if len(bad):
        raise MeshError(
            f"triangle {bad[0]} with nodes {triples[bad[0]].tolist()} is a face of no tetrahedron "
            f"({len(bad)} of {len(found)} such triangles); expected faces of the volume mesh: {cure}"
        )


def _find_open(table: _FaceTable, open_faces: npt.ArrayLike | None) -> Ints:
    """Numbers of the mesh faces to be opened."""
    triples = _triples([] if open_faces is None else open_faces)
    face = table.find(triples)
    _require_faces(face, triples, "embed the two-sided surface in the volume before meshing")
    outer = np.flatnonzero(table.tet[face, 1] < 0)
    if len(outer):
        raise MeshError(
            f"triangle {outer[0]} with nodes {triples[outer[0]].tolist()} lies on the outside of the mesh; a two-sided "
            "surface needs a tetrahedron on either side: take it out of the surface, or give it a one-sided kind"
        )
    return np.unique(face)


def _open(ids: list[Ints], counts: list[int], table: _FaceTable, opened: Ints) -> tuple[list[Ints], list[int], list[Ints]]:
    """Split vertices, edges and faces that touch the opened faces; also the old number behind each new one."""
    closed = table.tet[:, 1] >= 0
    closed[opened] = False
    tet, slot = table.tet[closed], table.slot[closed]
    side_tet, side_slot = table.tet[opened, 0], table.slot[opened, 0]
    out = [
        _split(table_ids, count, members[side_slot], side_tet, tet, members[slot])
        for table_ids, count, members in zip(ids, counts, (FACES, FACE_EDGES, np.arange(4)[:, None]), strict=True)
    ]
    return [o[0] for o in out], [len(o[1]) for o in out], [o[1] for o in out]


def _split(ids: Ints, count: int, touched_local: Ints, touched_tet: Ints, tet: Ints, local: Ints) -> tuple[Ints, Ints]:
    """Renumber the (tetrahedron, entity) pairs of one kind by what is joined through closed faces.

    local (closed faces, 2, k): the k entities of each closed face in its two tetrahedra.
    """
    touched = np.zeros(count, dtype=bool)
    touched[ids[touched_tet[:, None], touched_local]] = True
    pair_of = np.full(ids.shape, -1, dtype=np.int64)
    inside = touched[ids]
    pair_of[inside] = np.arange(np.count_nonzero(inside))
    first, second = _links(ids, pair_of, tet, local)
    size = int(np.count_nonzero(inside))
    graph = coo_matrix((np.ones(len(first), dtype=np.int8), (first, second)), shape=(size, size))
    _, part = connected_components(graph, directed=False)
    return _renumber(ids, count, inside, np.asarray(part, dtype=np.int64))


def _links(ids: Ints, pair_of: Ints, tet: Ints, local: Ints) -> tuple[Ints, Ints]:
    """Pairs of (tetrahedron, entity) that meet in a closed face; the entity number says which is which."""
    a_local, b_local = local[:, 0], local[:, 1]
    a, b = tet[:, :1], tet[:, 1:]
    by_a = np.argsort(ids[a, a_local], axis=1)
    by_b = np.argsort(ids[b, b_local], axis=1)
    first = pair_of[a, np.take_along_axis(a_local, by_a, axis=1)]
    second = pair_of[b, np.take_along_axis(b_local, by_b, axis=1)]
    keep = first >= 0
    return first[keep], second[keep]


def _renumber(ids: Ints, count: int, inside: Bools, part: Ints) -> tuple[Ints, Ints]:
    """The first part of each entity keeps its number, more are appended; also the old number of each new one."""
    old = ids[inside]
    first_of_part = np.unique(part, return_index=True)[1]
    owner = old[first_of_part]
    keeps = np.zeros(len(owner), dtype=bool)
    keeps[np.unique(owner, return_index=True)[1]] = True
    number = np.where(keeps, owner, count + np.cumsum(~keeps) - 1)
    out = ids.copy()
    out[inside] = number[part]
    return out, np.concatenate([np.arange(count), owner[~keeps]])
