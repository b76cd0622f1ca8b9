"""Integrals over faces, given as (tetrahedron, local face) pairs; local face i lies opposite the mesh's corner i.

    B_ij = int N_i N_j dS,   f_i = int N_i g dS,   n = outward normal of the tetrahedron.

Every face is parametrised by its corners in ascending mesh number, so that points on the two sides of an opened surface
coincide one by one.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from murmesh.solver.dofs import DofMap
from murmesh.solver.elements.geometry import LOCAL_FACES, Geometry
from murmesh.solver.elements.quadrature import triangle_rule
from murmesh.solver.elements.tetrahedron import face_functions, reference_face_mass, triangle_basis
from murmesh.solver.errors import MeshError

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Sides = tuple[npt.ArrayLike, npt.ArrayLike]

_CHUNK = 4_000_000  # numbers held at once in a temporary
_BENT_MARGIN = 6  # added degree on curved faces, whose area element is no polynomial


@dataclass(frozen=True)
class FacePoints:
    """Quadrature points on m faces: points (m, q, 3), weights (m, q) [m2], normals (m, q, 3), bary (m, q, 4).

    Weights include the area element; bary is in the mesh's own corner order of the tetrahedron; tangents (m, q, 2, 3) [m]
    are dx/dlambda_1 and dx/dlambda_2 of the face's ascending corners.
    """

    points: Floats
    weights: Floats
    normals: Floats
    bary: Floats
    tangents: Floats


def face_points(geometry: Geometry, tet: npt.ArrayLike, local_face: npt.ArrayLike, degree: int) -> FacePoints:
    """Quadrature points of a rule exact to `degree` on straight faces."""
    which, face = _checked(tet, local_face)
    lam, weights = triangle_rule(degree)
    corners = _ascending_corners(geometry, which, face)
    bary = np.zeros((len(which), len(weights), 4))
    np.put_along_axis(bary, np.broadcast_to(corners[:, None], (*bary.shape[:2], 3)), lam[None], axis=2)
    rows = geometry.derivatives(which, bary)
    a, b, c = (np.take_along_axis(rows, corners[:, None, i, None, None], axis=2)[:, :, 0] for i in range(3))
    inward = np.take_along_axis(rows, face[:, None, None, None], axis=2)[:, :, 0] - a
    area = np.cross(b - a, c - a)
    size = np.linalg.norm(area, axis=2)
    sign = -np.sign(np.einsum("mqd,mqd->mq", area, inward))
    normals = area * (sign / np.maximum(size, 1e-300))[..., None]
    return FacePoints(geometry.map(which, bary), size * weights, normals, bary, np.stack([b - a, c - a], axis=2))


def surface_points(
    geometry: Geometry, tet: npt.ArrayLike, local_face: npt.ArrayLike, degree: int
) -> tuple[Floats, Floats, Floats]:
    """points (m q, 3) [m], weights (m q,) [m2] and outward normals (m q, 3), one face after another."""
    found = face_points(geometry, tet, local_face, degree)
    return found.points.reshape(-1, 3), found.weights.ravel(), found.normals.reshape(-1, 3)


def surface_area(geometry: Geometry, tet: npt.ArrayLike, local_face: npt.ArrayLike) -> float:
    """S = int dS [m2] of the faces together; curved ones by a rule of degree 8."""
    return float(face_points(geometry, tet, local_face, 8).weights.sum())


def surface_normals(geometry: Geometry, tet: npt.ArrayLike, local_face: npt.ArrayLike) -> Floats:
    """Mean unit normal (m, 3) of each face, out of the tetrahedron."""
    found = face_points(geometry, tet, local_face, 2)
    mean = np.einsum("mq,mqd->md", found.weights, found.normals)
    return np.asarray(mean / np.linalg.norm(mean, axis=1, keepdims=True))


def surface_mass(geometry: Geometry, dofmap: DofMap, tet: npt.ArrayLike, local_face: npt.ArrayLike) -> sp.csr_matrix:
    """B = int q p dS (n_dofs, n_dofs) [m2] over the given faces, real symmetric."""
    return surface_cross_mass(geometry, dofmap, (tet, local_face), (tet, local_face))


def surface_cross_mass(geometry: Geometry, dofmap: DofMap, side_a: Sides, side_b: Sides) -> sp.csr_matrix:
    """B_ab = int q_a p_b dS (n_dofs, n_dofs) [m2]: rows on side a, columns on side b of the same faces, pair by pair.

    Raises: MeshError when the two sides are not the same faces.
    """
    (tet_a, face_a), (tet_b, face_b) = _checked(*side_a), _checked(*side_b)
    _require_same(geometry, (tet_a, face_a), (tet_b, face_b))
    n = dofmap.n_dofs
    out = sp.csr_matrix((n, n))
    for part, order in pieces(dofmap, tet_a, tet_b):
        rows = trace_dofs(dofmap, tet_a[part], face_a[part], order)
        cols = trace_dofs(dofmap, tet_b[part], face_b[part], order)
        values = _face_matrices(geometry, tet_a[part], face_a[part], order)
        keep = (rows >= 0)[:, :, None] & (cols >= 0)[:, None, :]
        i, j = np.broadcast_arrays(rows[:, :, None], cols[:, None, :])
        out = out + sp.coo_matrix((values[keep], (i[keep], j[keep])), shape=(n, n)).tocsr()
    return out


def surface_load(
    geometry: Geometry,
    dofmap: DofMap,
    tet: npt.ArrayLike,
    local_face: npt.ArrayLike,
    values: Callable[[Floats], npt.NDArray[np.inexact]] | None = None,
    degree: int | None = None,
) -> npt.NDArray[np.inexact]:
    """f = int q g dS over the given faces: (n_dofs,) for g of shape (k,), (n_dofs, m) for g of shape (k, m).

    values: g at points (k, 3), called once per chunk of points; None is g = 1.  degree: of the quadrature, default
    2 p + 2 (exact for g of degree p + 2) on straight faces, 2 p + 6 where a tetrahedron is curved.
    """
    which, face = _checked(tet, local_face)
    total = np.zeros((dofmap.n_dofs, *_columns(values)))
    for part, order in pieces(dofmap, which, which):
        rule = _load_degree(geometry, which[part], order) if degree is None else degree
        found = face_points(geometry, which[part], face[part], rule)
        traces = triangle_basis(order, triangle_rule(rule)[0])
        g = np.ones(found.weights.size) if values is None else np.asarray(values(found.points.reshape(-1, 3)))
        weighted = found.weights[..., None] * g.reshape(*found.weights.shape, -1)
        each = np.einsum("qn,mqc->mnc", traces, weighted, optimize=True)
        dofs = trace_dofs(dofmap, which[part], face[part], order)
        there = dofs >= 0
        count = int(np.count_nonzero(there))
        add = sp.csr_matrix((np.ones(count), (dofs[there], np.arange(count))), shape=(dofmap.n_dofs, count))
        total = total + (add @ each[there]).reshape(-1, *g.shape[1:])
    return total


def face_dofs(dofmap: DofMap, tet: npt.ArrayLike, local_face: npt.ArrayLike) -> Ints:
    """(k,): the unknowns that do not vanish on the faces, each once, ascending."""
    which, face = _checked(tet, local_face)
    found = trace_dofs(dofmap, which, face, dofmap.max_order)
    return np.unique(found[found >= 0])


def trace_dofs(dofmap: DofMap, tet: Ints, local_face: Ints, order: int) -> Ints:
    """(m, nface(order)): unknowns of the traces on faces, -1 for those that do not exist."""
    slot = np.argmax(dofmap.topology.sorted_vertices[tet] == local_face[:, None], axis=1)
    table = np.stack([face_functions(order, i) for i in range(4)])
    return np.take_along_axis(dofmap.dofs_up_to(tet, order), table[slot], axis=1)


def _face_matrices(geometry: Geometry, tet: Ints, face: Ints, order: int) -> Floats:
    """(m, nface, nface): int N_i N_j dS of each face, by quadrature where the tetrahedron is curved."""
    twice_area = face_points(geometry, tet, face, 0).weights[:, 0] * 2.0
    out = np.asarray(twice_area[:, None, None] * reference_face_mass(order))
    bent = geometry.curved[tet]
    if np.any(bent):
        degree = 2 * order + _BENT_MARGIN
        weights = face_points(geometry, tet[bent], face[bent], degree).weights
        traces = triangle_basis(order, triangle_rule(degree)[0])
        out[bent] = np.matmul(traces.T, weights[:, :, None] * traces)
    return out


def pieces(dofmap: DofMap, tet_a: Ints, tet_b: Ints) -> Iterator[tuple[Ints, int]]:
    """Positions of faces in chunks, with the order whose traces hold both sides."""
    orders = np.maximum(dofmap.orders[tet_a], dofmap.orders[tet_b])
    for p in np.unique(orders):
        chosen = np.flatnonzero(orders == p)
        step = max(1, _CHUNK // (4 * ((p + 1) * (p + 2) // 2) ** 2))
        for start in range(0, len(chosen), step):
            yield chosen[start : start + step], int(p)


def _ascending_corners(geometry: Geometry, tet: Ints, face: Ints) -> Ints:
    """(m, 3): local corners of each face in ascending mesh number."""
    local = LOCAL_FACES[face]
    nodes = np.take_along_axis(geometry.tets[tet, :4], local, axis=1)
    return np.take_along_axis(local, np.argsort(nodes, axis=1), axis=1)


def _checked(tet: npt.ArrayLike, local_face: npt.ArrayLike) -> tuple[Ints, Ints]:
    which, face = np.asarray(tet, dtype=np.int64), np.asarray(local_face, dtype=np.int64)
    if which.shape != face.shape or which.ndim != 1 or np.any(which < 0) or np.any((face < 0) | (face > 3)):
        raise MeshError(
            f"faces were given as arrays of shapes {which.shape} and {face.shape}; expected two arrays (m,) of "
            "tetrahedra >= 0 and local faces 0..3: leave out the sides that `sides_of` marks with -1"
        )
    return which, face


def _require_same(geometry: Geometry, side_a: tuple[Ints, Ints], side_b: tuple[Ints, Ints]) -> None:
    if len(side_a[0]) == len(side_b[0]):
        a, b = (np.sort(geometry.tets[t[:, None], LOCAL_FACES[f]], axis=1) for t, f in (side_a, side_b))
        if np.array_equal(a, b):
            return
    raise MeshError(
        f"two sides of {len(side_a[0])} and {len(side_b[0])} faces do not share their corners; expected the same faces "
        "in the same order: take both from one call of `sides_of`"
    )


def _load_degree(geometry: Geometry, tet: Ints, order: int) -> int:
    return 2 * order + (_BENT_MARGIN if np.any(geometry.curved[tet]) else 2)


def _columns(values: Callable[[Floats], npt.NDArray[np.inexact]] | None) -> tuple[int, ...]:
    """The shape of g at one point."""
    return () if values is None else np.shape(values(np.zeros((1, 3))))[1:]
