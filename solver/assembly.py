"""Real, frequency-independent matrices and vectors on tetrahedra and their faces.

    K = int grad q . grad p dV,   M = int q p dV,   B = int q p dS,   F = int q g dS

Public functions take tetrahedra, local faces and barycentric coordinates in the mesh's own corner order; the sorted order
of the basis stays inside.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from murmesh.solver.dofs import DofMap
from murmesh.solver.elements.geometry import LOCAL_FACES, Geometry
from murmesh.solver.elements.quadrature import tetrahedron_rule, triangle_rule
from murmesh.solver.elements.tetrahedron import basis, face_functions, reduced_derivatives, reference_matrices

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
FaceSide = tuple[Ints, Ints]
_CHUNK_ENTRIES = 4_000_000

__all__ = [
    "DofMap", "Geometry", "evaluate", "evaluate_gradient", "face_dofs", "surface_area", "surface_cross_mass",
    "surface_load", "surface_mass", "surface_normals", "surface_points", "volume_matrices",
]  # fmt: skip


def volume_matrices(geometry: Geometry, dofmap: DofMap, tets: Ints) -> tuple[sp.csr_matrix, sp.csr_matrix]:
    """(K, M) over the given tetrahedra, (n, n) each."""
    parts = [_Sum(dofmap.n_dofs), _Sum(dofmap.n_dofs)]
    for order, at in dofmap.order_groups(tets):
        group = np.asarray(tets)[at]
        for curved in (False, True):
            which = group[geometry.curved[group] == curved]
            size = max(1, _CHUNK_ENTRIES // reference_matrices(order)[1].size)
            for chunk in np.array_split(which, -(-len(which) // size)) if len(which) else ():
                matrices = _curved(geometry, dofmap, order, chunk) if curved else _straight(geometry, dofmap, order, chunk)
                dofs = dofmap.element_dofs(chunk)
                for part, matrix in zip(parts, matrices, strict=True):
                    part.add(dofs, dofs, matrix)
    return parts[0].matrix(), parts[1].matrix()


class _Sum:
    """A sparse sum of element matrices, compressed chunk by chunk."""

    def __init__(self, size: int) -> None:
        self._sum = sp.csr_matrix((size, size))

    def add(self, rows: Ints, columns: Ints, values: Floats) -> None:
        r = np.broadcast_to(rows[:, :, None], values.shape)
        c = np.broadcast_to(columns[:, None, :], values.shape)
        kept = (r >= 0) & (c >= 0)
        entries = (values[kept], (r[kept], c[kept]))
        self._sum = self._sum + sp.coo_matrix(entries, shape=self._sum.shape).tocsr()

    def matrix(self) -> sp.csr_matrix:
        self._sum.sort_indices()
        return self._sum


def _straight(geometry: Geometry, dofmap: DofMap, order: int, tets: Ints) -> tuple[Floats, Floats]:
    """Six metric terms times reference matrices, one matrix product."""
    stiffness, mass = reference_matrices(order)
    gradients, det = (array[tets] for array in geometry.straight_jacobians)
    g = np.take_along_axis(gradients, dofmap.topology.sorted_vertices[tets][:, :, None], axis=1)[:, 1:]
    metric = np.einsum("tid,tjd->tij", g, g) * det[:, None, None]
    six = np.stack([metric[:, i, j] for i, j in ((0, 0), (1, 1), (2, 2), (0, 1), (0, 2), (1, 2))], axis=1)
    n = mass.shape[0]
    return (six @ stiffness.reshape(6, -1)).reshape(-1, n, n), det[:, None, None] * mass


def _curved(geometry: Geometry, dofmap: DofMap, order: int, tets: Ints) -> tuple[Floats, Floats]:
    """Quadrature; the Jacobian of a ten-node tetrahedron has degree 3, its inverse is not polynomial (two more points)."""
    points, weights = tetrahedron_rule(2 * order + 4)
    values, dbary = basis(order, points)
    d = reduced_derivatives(dbary)
    rank = np.argsort(dofmap.topology.sorted_vertices[tets], axis=1)
    gradients, det = geometry.jacobians(tets, np.swapaxes(points[:, rank], 0, 1))
    g = np.take_along_axis(gradients, dofmap.topology.sorted_vertices[tets][:, None, :, None], axis=2)[:, :, 1:]
    weighted = det * weights
    metric = np.einsum("tqid,tqjd,tq->tqij", g, g, weighted)
    stiffness = np.einsum("qai,tqij,qbj->tab", d, metric, d, optimize=True)
    return stiffness, np.einsum("qa,tq,qb->tab", values, weighted, values, optimize=True)


# ---------------------------------------------------------------------------------------------------------------------
# faces


def _face_bary(face: Ints, bary: Floats) -> Floats:
    """(m, q, 4) in mesh corner order, of points (q, 3) on local faces (m,)."""
    out = np.zeros((len(face), len(bary), 4))
    rows = np.arange(len(face))[:, None]
    for corner in range(3):
        out[rows, np.arange(len(bary))[None, :], LOCAL_FACES[face][:, corner][:, None]] = bary[:, corner]
    return out


def _face_frame(geometry: Geometry, tet: Ints, face: Ints, degree: int) -> tuple[Floats, Floats, Floats]:
    """bary (m, q, 4), weight times area element (m, q), and unit normal out of the tetrahedron (m, q, 3)."""
    points, weights = triangle_rule(degree)
    bary = _face_bary(face, points)
    rows = geometry.derivatives(tet, bary)
    corner = LOCAL_FACES[face]
    m = np.arange(len(face))
    a, b, c, d = (rows[m, :, corner[:, 0]], rows[m, :, corner[:, 1]], rows[m, :, corner[:, 2]], rows[m, :, face])
    normal = np.cross(b - a, c - a)
    size = np.linalg.norm(normal, axis=2)
    outward = -np.sign(np.einsum("mqd,mqd->mq", normal, d - a))
    return bary, size * weights, normal * (outward / size)[..., None]


def surface_points(geometry: Geometry, tet: Ints, face: Ints, degree: int) -> tuple[Floats, Floats, Floats]:
    """Points (m q, 3), weights (m q,) that sum to the area, and normals (m q, 3) out of the tetrahedra."""
    bary, weights, normals = _face_frame(geometry, tet, face, degree)
    return geometry.map(tet, bary).reshape(-1, 3), weights.ravel(), normals.reshape(-1, 3)


def surface_area(geometry: Geometry, tet: Ints, face: Ints) -> float:
    """Area [m2] of the faces."""
    return float(_face_frame(geometry, tet, face, 4)[1].sum())


def surface_normals(geometry: Geometry, tet: Ints, face: Ints) -> Floats:
    """Unit normals (m, 3) out of the tetrahedra at the centres of the faces."""
    return np.asarray(_face_frame(geometry, tet, face, 1)[2][:, 0])


def face_dofs(dofmap: DofMap, tet: Ints, face: Ints) -> Ints:
    """The unknowns (k,) that do not vanish on the faces, each once."""
    found = [_traces(dofmap, t, f)[1].ravel() for _, t, f in _groups(dofmap, tet, face)]
    dofs = np.unique(np.concatenate(found)) if found else np.empty(0, dtype=np.int64)
    return dofs[dofs >= 0]


def _groups(dofmap: DofMap, tet: Ints, face: Ints) -> list[tuple[Ints, Ints, Ints]]:
    """(positions, tet, face) with one order and one sorted local face each."""
    slot = np.argsort(dofmap.topology.sorted_vertices[tet], axis=1)[np.arange(len(tet)), face]
    key = dofmap.orders[tet] * 4 + slot
    return [(at, tet[at], face[at]) for at in (np.flatnonzero(key == k) for k in np.unique(key))]


def _traces(dofmap: DofMap, tet: Ints, face: Ints) -> tuple[int, Ints]:
    """Sorted local face of a group from `_groups`, and its unknowns (m, nface)."""
    slot = int(np.flatnonzero(dofmap.topology.sorted_vertices[tet[0]] == face[0])[0])
    order = int(dofmap.orders[tet[0]])
    return slot, dofmap.element_dofs(tet)[:, face_functions(order, slot)]


def _trace_values(dofmap: DofMap, tet: Ints, bary: Floats) -> Floats:
    """Basis values (m, q, nloc) at mesh-order bary (m, q, 4) of tetrahedra of one order."""
    order = int(dofmap.orders[tet[0]])
    lam = np.take_along_axis(bary, dofmap.topology.sorted_vertices[tet][:, None, :], axis=2)
    return basis(order, lam.reshape(-1, 4))[0].reshape(*bary.shape[:2], -1)


def surface_mass(geometry: Geometry, dofmap: DofMap, tet: Ints, face: Ints) -> sp.csr_matrix:
    """B = int q p dS over faces (tet (m,), local face (m,)), (n, n)."""
    return surface_cross_mass(geometry, dofmap, (tet, face), (tet, face))


def surface_cross_mass(geometry: Geometry, dofmap: DofMap, front: FaceSide, back: FaceSide) -> sp.csr_matrix:
    """B_ab = int q_a p_b dS, q on the front and p on the back side of the same faces, pair by pair."""
    total = _Sum(dofmap.n_dofs)
    for at, tet, face in _groups(dofmap, *front):
        other = (back[0][at], back[1][at])
        for sub, tet_b, face_b in _groups(dofmap, *other):
            rows = _pair(geometry, dofmap, (tet[sub], face[sub]), (tet_b, face_b))
            total.add(*rows)
    return total.matrix()


def _pair(geometry: Geometry, dofmap: DofMap, a: FaceSide, b: FaceSide) -> tuple[Ints, Ints, Floats]:
    degree = int(dofmap.orders[a[0][0]] + dofmap.orders[b[0][0]]) + (2 if np.any(geometry.curved[a[0]]) else 0)
    bary_a, weights, _ = _face_frame(geometry, *a, degree)
    bary_b = bary_a if a[0] is b[0] else _same_points(geometry, a, b, bary_a)
    (slot_a, dofs_a), (slot_b, dofs_b) = _traces(dofmap, *a), _traces(dofmap, *b)
    values_a = _trace_values(dofmap, a[0], bary_a)[..., face_functions(int(dofmap.orders[a[0][0]]), slot_a)]
    values_b = _trace_values(dofmap, b[0], bary_b)[..., face_functions(int(dofmap.orders[b[0][0]]), slot_b)]
    return dofs_a, dofs_b, np.einsum("mqa,mq,mqb->mab", values_a, weights, values_b, optimize=True)


def _same_points(geometry: Geometry, a: FaceSide, b: FaceSide, bary: Floats) -> Floats:
    """The points of side a in the barycentric coordinates of side b: both share the corner nodes of the face."""
    nodes_a, nodes_b = geometry.tets[a[0]][:, :4], geometry.tets[b[0]][:, :4]
    same = nodes_b[:, :, None] == nodes_a[:, None, :]  # (m, corner b, corner a)
    return np.einsum("mba,mqa->mqb", same.astype(np.float64), bary)


def surface_load(
    geometry: Geometry,
    dofmap: DofMap,
    tet: Ints,
    face: Ints,
    values: Callable[[Floats], Floats] | None,
    degree: int | None = None,
) -> Floats:
    """F = int q g dS, (n,) or (n, m) for g giving (k,) or (k, m) at points (k, 3); g = 1 when None."""
    result: Floats | None = None
    for _, group, local in _groups(dofmap, tet, face):
        order = int(dofmap.orders[group[0]])
        bary, weights, _ = _face_frame(geometry, group, local, degree or 2 * order + 4)
        slot, dofs = _traces(dofmap, group, local)
        traces = _trace_values(dofmap, group, bary)[..., face_functions(order, slot)]
        given = np.ones(weights.size) if values is None else np.asarray(values(geometry.map(group, bary).reshape(-1, 3)))
        columns = given.reshape(*weights.shape, -1)
        local_load = np.einsum("mqa,mq,mqc->mac", traces, weights, columns, optimize=True)
        if result is None:
            result = np.zeros((dofmap.n_dofs, columns.shape[2]))
        kept = dofs >= 0
        scatter = sp.csr_matrix((np.ones(kept.sum()), (dofs[kept], np.arange(kept.sum()))), (dofmap.n_dofs, kept.sum()))
        result += scatter @ local_load[kept]
        flat = given.ndim == 1
    if result is None:
        return np.zeros(dofmap.n_dofs)
    return result[:, 0] if flat else result


# ---------------------------------------------------------------------------------------------------------------------
# points


def evaluate(geometry: Geometry, dofmap: DofMap, tet: Ints, bary: Floats) -> sp.csr_matrix:
    """Rows (k, n) with p(x_k) = row p, at bary (k, 4) of tet (k,)."""
    return _rows(dofmap, tet, lambda at, order: basis(order, _sorted(dofmap, tet[at], bary[at]))[0])


def evaluate_gradient(geometry: Geometry, dofmap: DofMap, tet: Ints, bary: Floats) -> tuple[sp.csr_matrix, ...]:
    """Three matrices (k, n) that give dp/dx, dp/dy, dp/dz at bary (k, 4) of tet (k,)."""
    gradients = geometry.jacobians(tet, bary[:, None])[0][:, 0] if len(tet) else np.empty((0, 4, 3))
    own = np.take_along_axis(gradients, dofmap.topology.sorted_vertices[tet][:, :, None], axis=1)

    def component(axis: int) -> Callable[[Ints, int], Floats]:
        def values(at: Ints, order: int) -> Floats:
            d = basis(order, _sorted(dofmap, tet[at], bary[at]))[1]
            return np.einsum("kni,ki->kn", d, own[at, :, axis])

        return values

    return tuple(_rows(dofmap, tet, component(axis)) for axis in range(3))


def _sorted(dofmap: DofMap, tet: Ints, bary: Floats) -> Floats:
    return np.take_along_axis(bary, dofmap.topology.sorted_vertices[tet], axis=1)


def _rows(dofmap: DofMap, tet: Ints, values: Callable[[Ints, int], Floats]) -> sp.csr_matrix:
    rows, columns, entries = [], [], []
    for order, at in dofmap.order_groups(tet):
        dofs = dofmap.element_dofs(tet[at])
        kept = dofs >= 0
        rows.append(np.broadcast_to(at[:, None], dofs.shape)[kept])
        columns.append(dofs[kept])
        entries.append(values(at, order)[kept])
    if not rows:
        return sp.csr_matrix((len(tet), dofmap.n_dofs))
    data = (np.concatenate(entries), (np.concatenate(rows), np.concatenate(columns)))
    return sp.csr_matrix(data, shape=(len(tet), dofmap.n_dofs))
