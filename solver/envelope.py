"""The surface that carries infinite elements: is it star-shaped, closed, centred; its trace unknowns; its matrices.

    A_out = (1/rho) (K + i (w/c) C - (w/c)^2 M),   (A_out u)_a = -(1/rho) int N_a dp/dn dS on the surface's own unknowns

The pressure on the surface is that of the finite elements. The N - 1 further radial functions of every trace function are
unknowns of their own, numbered behind those of the mesh: trace by trace, radial function by radial function.

A ground plane through the centre, rigid or pressure-release, closes a dome: rays from the centre then stay on one side of it.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from murmesh.solver.dofs import DofMap
from murmesh.solver.elements.geometry import LOCAL_FACES, MIDDLE_EDGES, Geometry
from murmesh.solver.elements.infinite import SurfaceForms, radial_matrices, scaled_condition, surface_forms
from murmesh.solver.elements.quadrature import triangle_rule
from murmesh.solver.elements.tetrahedron import EDGE, EDGES, FACE_EDGES, triangle_basis, triangle_derivatives
from murmesh.solver.errors import MeshError
from murmesh.solver.faces import FacePoints, face_dofs, face_points, pieces, surface_mass, trace_dofs

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
Ints = npt.NDArray[np.int64]
Bools = npt.NDArray[np.bool_]

_MARGIN = 8
"""Added degree of the surface integrals: h and R are no polynomials."""
_ON_PLANE = 1e-6
"""Part of the surface's size within which a point counts as on a plane, or a centre as on the surface."""
FEW_RADIAL, MANY_RADIAL, FEW_BELOW = 8, 10, 10.0


def automatic_radial(ka: float) -> int:
    """Radial functions for a surface of largest radius a: 8 up to k a = 10, 10 above."""
    return FEW_RADIAL if ka <= FEW_BELOW else MANY_RADIAL


@dataclass(frozen=True)
class Ground:
    """A plane through the centre of a dome: unit normal into the half space; `sign` of the image, +1 rigid, -1 p = 0."""

    normal: tuple[float, float, float]
    sign: int

    @classmethod
    def of(cls, normal: npt.ArrayLike, sign: int) -> Ground:
        """From a normal of any length."""
        n = np.asarray(normal, dtype=np.float64)
        x, y, z = (float(v) for v in n / np.linalg.norm(n))
        return cls((x, y, z), sign)

    def mirror(self, centre: Floats, points: Floats) -> Floats:
        """Images (..., 3) of points."""
        n = np.asarray(self.normal)
        return np.asarray(points - 2.0 * ((points - centre) @ n)[..., None] * n)


@dataclass(frozen=True, eq=False)
class Envelope:
    """Faces (m,) as (tetrahedron, local face), whose normals point outwards, a centre (3,) and N radial functions.

    first: number of the first further unknown.  Raises: MeshError when the surface is open, not star-shaped about the
    centre, or not closed by the ground plane; made by `envelope`.
    """

    geometry: Geometry
    dofs: DofMap
    tet: Ints
    face: Ints
    centre: Floats
    radial: int
    ground: Ground | None
    first: int

    @cached_property
    def trace(self) -> Ints:
        """(T,): unknowns of the mesh that do not vanish on the surface."""
        return face_dofs(self.dofs, self.tet, self.face)

    @property
    def extra(self) -> int:
        """Further unknowns."""
        return len(self.trace) * (self.radial - 1)

    @cached_property
    def numbers(self) -> Ints:
        """(T, N): the unknown of each trace and radial function."""
        more = self.first + np.arange(self.extra).reshape(len(self.trace), self.radial - 1)
        return np.column_stack([self.trace, more])

    @cached_property
    def largest_radius(self) -> float:
        """a = max R [m]."""
        return float(
            np.linalg.norm(self.geometry.nodes[_face_nodes(self.geometry, self.tet, self.face)] - self.centre, axis=1).max()
        )

    def matrices(self, size: int) -> tuple[sp.csr_matrix, sp.csr_matrix, sp.csr_matrix]:
        """K, C, M (size, size), real, K [m], C [m2], M [m3]; K and C are not symmetric."""
        s, t = self._forms, radial_matrices(self.radial)
        k = _sum((s["s1"], t.t0), (s["s3"].T, t.t1), (s["s3"], t.t2), (s["s2"], t.t3))
        c = _sum((s["s4"], t.t4), (s["s5"], t.t1 - t.t2), (s["s6"].T - s["s6"], t.t0))
        m = _sum((-s["s7"], t.t0))
        out = [self._placed(each, size) for each in (k, c, m)]
        return out[0], out[1], out[2]

    @cached_property
    def mass(self) -> sp.csr_matrix:
        """B = int N_a N_b dS (T, T) [m2]."""
        return surface_mass(self.geometry, self.dofs, self.tet, self.face)[self.trace][:, self.trace]

    @cached_property
    def held(self) -> Bools:
        """(T,): trace functions that a pressure-release ground plane holds at zero."""
        if self.ground is None or self.ground.sign > 0:
            return np.zeros(len(self.trace), dtype=bool)
        return np.isin(self.trace, _rim_dofs(self.dofs, self.tet, self.face))

    def condition(self, k: float) -> float:
        """Largest condition number of the diagonally scaled radial matrices A_aa(k) (N, N) of the trace functions a."""
        s, t = self._diagonals, radial_matrices(self.radial)
        stiffness = _outer(s.s1, t.t0) + _outer(s.s3, t.t1 + t.t2) + _outer(s.s2, t.t3)
        wave = _outer(s.s4, t.t4) + _outer(s.s5, t.t1 - t.t2)
        matrix = np.asarray(stiffness + 1j * k * wave + k * k * _outer(s.s7, t.t0), dtype=np.complex128)
        return float(scaled_condition(matrix).max())

    def points(self, degree: int) -> tuple[FacePoints, sp.csr_matrix]:
        """Quadrature points of the faces, and rows E (m q, T) of the trace functions there."""
        found = face_points(self.geometry, self.tet, self.face, degree)
        lam = triangle_rule(degree)[0]
        out = sp.csr_matrix((found.weights.size, len(self.trace)))
        for part, order in pieces(self.dofs, self.tet, self.tet):
            columns = self._columns(part, order)
            values = np.broadcast_to(triangle_basis(order, lam), (len(part), len(lam), columns.shape[1]))
            rows = part[:, None] * len(lam) + np.arange(len(lam))
            i, j = np.broadcast_arrays(rows[:, :, None], columns[:, None, :])
            out = out + sp.csr_matrix((values[j >= 0], (i[j >= 0], j[j >= 0])), shape=out.shape)
        return found, out

    def _columns(self, part: Ints, order: int) -> Ints:
        """(m, nface): places in `trace`, -1 for functions that do not exist."""
        dofs = trace_dofs(self.dofs, self.tet[part], self.face[part], order)
        return np.where(dofs >= 0, np.searchsorted(self.trace, dofs), -1)

    @cached_property
    def _forms(self) -> dict[str, sp.csr_matrix]:
        """S1 .. S7 as sparse matrices (T, T), by name."""
        names = list(SurfaceForms.__dataclass_fields__)
        each = [(self._columns(part, order), self._face_forms(part, order)) for part, order in self._pieces()]
        return {name: self._scatter([(at, getattr(forms, name)) for at, forms in each]) for name in names}

    @cached_property
    def _diagonals(self) -> SurfaceForms:
        return SurfaceForms(**{name: form.diagonal() for name, form in self._forms.items()})

    def _pieces(self) -> list[tuple[Ints, int]]:
        """Faces of one order, few enough at a time for the gradients at their points."""
        found = pieces(self.dofs, self.tet, self.tet)
        return [(few, order) for part, order in found for few in np.array_split(part, len(part) // 200 + 1)]

    def _face_forms(self, part: Ints, order: int) -> SurfaceForms:
        degree = 2 * order + _MARGIN
        found = face_points(self.geometry, self.tet[part], self.face[part], degree)
        lam = triangle_rule(degree)[0]
        metric = np.einsum("mqid,mqjd->mqij", found.tangents, found.tangents)
        dual = np.matmul(np.linalg.inv(metric), found.tangents)
        gradients = np.einsum("qni,mqid->mqnd", triangle_derivatives(order, lam), dual, optimize=True)
        values = triangle_basis(order, lam)
        return surface_forms(values, gradients, found.points - self.centre, found.normals, found.weights)

    def _scatter(self, blocks: list[tuple[Ints, Floats]]) -> sp.csr_matrix:
        """Face matrices (m, n, n) added into (T, T)."""
        size = len(self.trace)
        out = sp.csr_matrix((size, size))
        for at, values in blocks:
            i, j = np.broadcast_arrays(at[:, :, None], at[:, None, :])
            keep = (i >= 0) & (j >= 0)
            out = out + sp.coo_matrix((values[keep], (i[keep], j[keep])), shape=(size, size)).tocsr()
        return out

    def _placed(self, matrix: sp.coo_matrix, size: int) -> sp.csr_matrix:
        where = self.numbers.ravel()
        return sp.csr_matrix((matrix.data, (where[matrix.row], where[matrix.col])), shape=(size, size))


def envelope(
    geometry: Geometry,
    dofs: DofMap,
    sides: tuple[Ints, Ints],
    *,
    centre: npt.ArrayLike | None = None,
    radial: int = 0,
    k: float = 0.0,
    ground: Ground | None = None,
    first: int | None = None,
) -> Envelope:
    """The envelope on `sides`, checked. No centre: the middle of the bounding box, moved into the plane of the rim of a dome;
    no number of radial functions: the automatic one at the largest wave number k.

    Raises: MeshError for a surface that is open, not star-shaped, or not closed by its ground plane.
    """
    tet, face = (np.asarray(part, dtype=np.int64) for part in sides)
    given = np.zeros(3) if centre is None else np.asarray(centre, dtype=np.float64)
    found = Envelope(geometry, dofs, tet, face, given, 1, ground, dofs.n_dofs if first is None else first)
    if centre is None:
        found = replace(found, centre=default_centre(found))
    _require_star_shape(found)
    _require_closed(found)
    return replace(found, radial=radial or automatic_radial(k * found.largest_radius))


def default_centre(found: Envelope) -> Floats:
    """The middle (3,) of the bounding box of the faces' nodes, for a dome moved along the normal to the height of its rim."""
    x = found.geometry.nodes[_face_nodes(found.geometry, found.tet, found.face)]
    middle = np.asarray(0.5 * (x.min(axis=0) + x.max(axis=0)))
    rim = _rim_ends(found)
    if found.ground is None or not len(rim):
        return middle
    n = np.asarray(found.ground.normal)
    return np.asarray(middle + (float((rim @ n).mean()) - middle @ n) * n)


def _face_nodes(geometry: Geometry, tet: Ints, face: Ints) -> Ints:
    """Nodes of the faces, each once, those at mid-edges too."""
    corners = LOCAL_FACES[face]
    nodes = [np.take_along_axis(geometry.tets[tet], corners, axis=1)]
    if geometry.tets.shape[1] == 10:
        on_face = (MIDDLE_EDGES[None] != face[:, None, None]).all(axis=2)
        nodes.append(geometry.tets[tet][:, 4:][on_face])
    return np.unique(np.concatenate([each.ravel() for each in nodes]))


def _require_star_shape(found: Envelope) -> None:
    """n . r > 0 everywhere: every ray from the centre leaves through the surface once."""
    at = face_points(found.geometry, found.tet, found.face, 2 * found.dofs.max_order + _MARGIN)
    arms = at.points - found.centre
    radius = np.linalg.norm(arms, axis=2)
    cosine = np.einsum("mqd,mqd->mq", arms, at.normals) / np.maximum(radius, 1e-300)
    worst = np.unravel_index(int(np.argmin(cosine)), cosine.shape)
    if cosine[worst] > _GRAZING:
        return
    nodes = found.geometry.nodes[_face_nodes(found.geometry, found.tet, found.face)]
    gap = float(np.linalg.norm(nodes - found.centre, axis=1).min())
    flat = float(np.abs(np.einsum("mqd,mqd->mq", arms, at.normals)).min())
    close = min(gap, flat if radius.min() < 0.5 * found.largest_radius else gap)
    if close < _ON_PLANE * found.largest_radius:
        raise MeshError(
            f"the centre {_words(found.centre)} m lies on the surface that radiates; expected a point inside, from which "
            "all of the surface is seen: give another centre"
        )
    bad = np.count_nonzero((cosine <= _GRAZING).any(axis=1))
    raise MeshError(
        f"the surface that radiates is not star-shaped about {_words(found.centre)} m: near {_words(at.points[worst])} m a "
        f"ray from there grazes it or leaves it from behind ({bad} of {len(cosine)} triangles); give a centre from which all "
        "of it is seen, or wrap the model in a convex surface"
    )


_GRAZING = 0.02
"""Cosine between ray and normal below which an element would be all but flat."""


def _require_closed(found: Envelope) -> None:
    """No free edge, or all of them on a ground plane through the centre."""
    ends = _rim_ends(found)
    if found.ground is None:
        if len(ends):
            raise MeshError(
                f"the surface that radiates is open along {len(ends)} edges, one at {_words(ends[0].mean(axis=0))} m; "
                "expected a closed surface: add the missing surfaces to the kind, or give the ground plane that closes a dome"
            )
        return
    n = np.asarray(found.ground.normal)
    size = found.largest_radius
    if not len(ends):
        raise MeshError(
            "the surface that radiates is closed, but a ground plane is given; expected a dome that ends on the plane: leave "
            "out the ground plane, or take the surfaces on it out of the kind"
        )
    off = np.abs((ends - found.centre) @ n).max(axis=1)
    if off.max() > _ON_PLANE * size:
        worst = ends[int(np.argmax(off))].mean(axis=0)
        raise MeshError(
            f"the ground plane through the centre {_words(found.centre)} m does not hold the rim of the dome: at "
            f"{_words(worst)} m the rim is {off.max():.3g} m off the plane; put the centre onto the plane of the rim, and "
            "check the normal"
        )
    points = found.geometry.nodes[_face_nodes(found.geometry, found.tet, found.face)]
    depth = (points - found.centre) @ n
    if depth.min() < -_ON_PLANE * size:
        raise MeshError(
            f"the dome reaches {-depth.min():.3g} m below its ground plane, at {_words(points[int(np.argmin(depth))])} m; "
            "expected it on the side that the normal looks to: turn the normal round"
        )


def _rim(dofs: DofMap, tet: Ints, face: Ints) -> tuple[Ints, Ints]:
    """Edges that belong to one face only, as edge numbers (k,) and their two vertices (k, 2)."""
    topology = dofs.topology
    slot = np.argmax(topology.sorted_vertices[tet] == face[:, None], axis=1)
    local = FACE_EDGES[slot]
    edges = np.take_along_axis(topology.tet_edge_ids[tet], local, axis=1).ravel()
    vertices = topology.tet_vertex_ids[tet][np.arange(len(tet))[:, None, None], EDGES[local]].reshape(-1, 2)
    found, first, count = np.unique(edges, return_index=True, return_counts=True)
    return found[count == 1], vertices[first[count == 1]]


def _rim_ends(found: Envelope) -> Floats:
    """End points (k, 2, 3) of the free edges."""
    vertices = _rim(found.dofs, found.tet, found.face)[1]
    return np.asarray(found.geometry.nodes[found.dofs.topology.vertex_nodes[vertices]])


def _rim_dofs(dofs: DofMap, tet: Ints, face: Ints) -> Ints:
    """Unknowns that do not vanish on the free edges."""
    edges, vertices = _rim(dofs, tet, face)
    entities = np.concatenate([np.unique(vertices), edges + dofs.first_entity[EDGE]])
    parts = [np.arange(dofs.offsets[e], dofs.offsets[e + 1]) for e in entities]
    return np.concatenate(parts) if parts else np.zeros(0, dtype=np.int64)


def _sum(*parts: tuple[Any, Floats]) -> sp.coo_matrix:
    """sum of S x T."""
    out = sp.csr_matrix((0, 0))
    for number, (surface, radial) in enumerate(parts):
        each = sp.kron(surface, radial, format="csr")
        out = each if number == 0 else out + each
    return out.tocoo()


def _outer(surface: Floats, radial: Floats) -> Floats:
    return np.asarray(surface[:, None, None] * radial)


def _words(point: Floats) -> str:
    return f"({point[0]:.4g}, {point[1]:.4g}, {point[2]:.4g})"
