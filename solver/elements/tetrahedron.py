"""The hierarchic H1 basis of orders 1 to 8 on the tetrahedron.

With lambda the barycentric coordinates of the vertices *in ascending global number*, L_i the scaled integrated Legendre
polynomial and P_j^(a) the scaled Jacobi polynomial of weight (1 - x)^a,

    vertex a          lambda_a
    edge a<b          L_i(lambda_b - lambda_a, lambda_a + lambda_b),                                   i >= 2
    face a<b<c        edge(a, b; i) lambda_c P_{j-1}^(2i-1)(lambda_c - lambda_a - lambda_b, s_abc),     j >= 1
    interior          face(a, b, c; i, j) lambda_d P_{k-1}^(2i+2j-2)(lambda_d - s_abc, s_abcd),         k >= 1

each of degree i, i+j, i+j+k, s the sum of the lambdas named.  The order of the vertices settles every orientation, so
that neighbours agree without signs; within each entity the functions ascend in degree, so that a lower order is a
prefix of a higher one.

Sources: S. Zaglmayr, High Order Finite Element Methods for Electromagnetic Field Computation (PhD thesis, JKU Linz
2006), section 5.2; S. Beuchler and J. Schoeberl, New shape functions for triangular p-FEM using integrated Jacobi
polynomials, Numer. Math. 103 (2006) 339.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
import numpy.typing as npt

from murmesh.solver.elements.quadrature import tetrahedron_rule, triangle_rule
from murmesh.solver.errors import MeshError

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

MAX_ORDER = 8
EDGES = np.array([[0, 1], [0, 2], [0, 3], [1, 2], [1, 3], [2, 3]])  # of the sorted vertices
FACES = np.array([[1, 2, 3], [0, 2, 3], [0, 1, 3], [0, 1, 2]])  # face i lies opposite vertex i
FACE_EDGES = np.array([[3, 4, 5], [1, 2, 5], [0, 2, 4], [0, 1, 3]])  # edges ab, ac, bc of each face
VERTEX, EDGE, FACE, CELL = range(4)
KIND_OF_ENTITY = np.repeat([VERTEX, EDGE, FACE, CELL], [4, 6, 4, 1])  # of the fifteen entities of a tetrahedron


def function_count(kind: int, order: npt.ArrayLike) -> Ints:
    """Functions of an entity: 1 per vertex, p-1 per edge, (p-1)(p-2)/2 per face, (p-1)(p-2)(p-3)/6 inside."""
    p = np.asarray(order, dtype=np.int64)
    if kind == VERTEX:
        return np.ones_like(p)
    if kind == EDGE:
        return p - 1
    return (p - 1) * (p - 2) // 2 if kind == FACE else (p - 1) * (p - 2) * (p - 3) // 6


def check_order(order: int) -> None:
    """Raises MeshError when no basis of that order exists."""
    if not 1 <= order <= MAX_ORDER:
        raise MeshError(f"element order {order} was asked for; orders 1 to {MAX_ORDER} exist: choose one, or refine the mesh")


@dataclass(frozen=True)
class Layout:
    """Which local function belongs to which entity.

    entity (nloc,): 0-3 vertices, 4-9 edges, 10-13 faces, 14 the interior; degree (nloc,): polynomial degree;
    starts (16,): the functions of entity e are starts[e]:starts[e+1], in ascending degree.
    """

    order: int
    entity: Ints
    degree: Ints
    starts: Ints

    @property
    def size(self) -> int:
        """Number of local functions, (p+1)(p+2)(p+3)/6."""
        return len(self.entity)


@cache
def layout(order: int) -> Layout:
    """The entities and degrees of the local functions of one order.

    Raises: MeshError when the order is outside 1..8.
    """
    check_order(order)
    degrees = [[1]] * 4 + [list(range(2, order + 1))] * 6
    degrees += [[i + j for i, j in _face_indices(order)]] * 4
    degrees += [[i + j + k for i, j, k in _cell_indices(order)]]
    sizes = np.array([len(d) for d in degrees])
    starts = np.concatenate([[0], np.cumsum(sizes)])
    parts = np.repeat(np.arange(15), sizes), np.concatenate(degrees).astype(np.int64), starts
    for part in parts:
        part.setflags(write=False)
    return Layout(order, *parts)


def _face_indices(order: int) -> list[tuple[int, int]]:
    return [(i, n - i) for n in range(3, order + 1) for i in range(2, n)]


def _cell_indices(order: int) -> list[tuple[int, int, int]]:
    return [(i, j, n - i - j) for n in range(4, order + 1) for i in range(2, n - 1) for j in range(1, n - i)]


# A jet is a value and its four derivatives d/dlambda, stacked as (5, q).
def _times(a: Floats, b: Floats) -> Floats:
    out: Floats = a[0] * b
    out[1:] += b[0] * a[1:]
    return out


def _integrated_legendre(x: Floats, t: Floats, order: int) -> dict[int, Floats]:
    """Scaled integrated Legendre jets L_2 .. L_order: n L_n = (2n-3) x L_{n-1} - (n-3) t^2 L_{n-2}, normalised."""
    t2 = _times(t, t)
    out = {1: x, 2: 0.5 * (_times(x, x) - t2)}
    for n in range(3, order + 1):
        out[n] = ((2 * n - 3) * _times(x, out[n - 1]) - (n - 3) * _times(t2, out[n - 2])) / n
    return {n: np.asarray(np.sqrt(n - 0.5) * out[n]) for n in range(2, order + 1)}


def _jacobi(x: Floats, t: Floats, alpha: int, degree: int) -> list[Floats]:
    """Scaled Jacobi jets t^n P_n^(alpha,0)(x/t), n = 0..degree (Abramowitz & Stegun 22.7.1), normalised in weight."""
    one = np.zeros_like(x)
    one[0] = 1.0
    out = [one, 0.5 * ((alpha + 2) * x + alpha * t)]
    t2 = _times(t, t)
    for n in range(1, degree):
        m = 2 * n + alpha
        lead = 2 * (n + 1) * (n + alpha + 1) * m
        linear = (m + 1) * (m * (m + 2) * x + alpha * alpha * t)
        out.append((_times(linear, out[n]) - 2 * n * (n + alpha) * (m + 2) * _times(t2, out[n - 1])) / lead)
    return [np.sqrt(2 * n + alpha + 1) * out[n] for n in range(degree + 1)]


def _jets(order: int, bary: Floats) -> list[Floats]:
    """All local functions as jets (5, q), in the order of the layout."""
    lam = np.zeros((4, 5, len(bary)))
    lam[:, 0] = bary.T
    lam[np.arange(4), np.arange(4) + 1] = 1.0
    edge = [_integrated_legendre(lam[b] - lam[a], lam[a] + lam[b], order) for a, b in EDGES]
    jets = list(lam) + [e[i] for e in edge for i in range(2, order + 1)]
    if order < 3:
        return jets
    faces = [_face_jets(order, lam[abc], edge[edges[0]]) for abc, edges in zip(FACES, FACE_EDGES, strict=True)]
    jets += [face[ij] for face in faces for ij in _face_indices(order)]
    return jets + _cell_jets(order, lam, faces[3])


def _face_jets(order: int, lam: Floats, edge: dict[int, Floats]) -> dict[tuple[int, int], Floats]:
    """Functions (i, j) of one face from those of its first edge; lam (3, 5, q)."""
    a, b, c = lam
    out = {}
    for i in range(2, order):
        ladder = _jacobi(c - a - b, a + b + c, 2 * i - 1, order - i - 1)
        base = _times(edge[i], c)
        out.update({(i, j): _times(base, ladder[j - 1]) for j in range(1, order - i + 1)})
    return out


def _cell_jets(order: int, lam: Floats, face: dict[tuple[int, int], Floats]) -> list[Floats]:
    """Interior functions from those of face 012."""
    s, d = lam[0] + lam[1] + lam[2], lam[3]
    ladders = {n: _jacobi(d - s, s + d, 2 * n - 2, order - n - 1) for n in range(3, order)}
    bubble = {ij: _times(face[ij], d) for ij in face if sum(ij) < order}
    return [_times(bubble[i, j], ladders[i + j][k - 1]) for i, j, k in _cell_indices(order)]


def basis(order: int, bary: Floats) -> tuple[Floats, Floats]:
    """Values N (q, nloc) and derivatives dN/dlambda (q, nloc, 4) at barycentric points (q, 4) of the sorted vertices.

    The four coordinates count as independent: grad N = sum_i dN/dlambda_i grad lambda_i.
    Raises: MeshError when the order is outside 1..8.
    """
    check_order(order)
    jets = np.stack(_jets(order, np.asarray(bary, dtype=np.float64)))
    return np.ascontiguousarray(jets[:, 0].T), np.ascontiguousarray(jets[:, 1:].transpose(2, 0, 1))


@cache
def reference_matrices(order: int) -> tuple[Floats, Floats]:
    """R (6, nloc, nloc) and M (nloc, nloc) on the reference tetrahedron of volume 1/6.

    K_e = sum_m g_m R_m with g = |det J| (G11, G22, G33, G12, G13, G23), G_ij = grad lambda_i . grad lambda_j, and
    M_e = |det J| M.  Here d_i = d/dlambda_i - d/dlambda_0, i = 1..3.
    """
    points, weights = tetrahedron_rule(2 * order)
    values, dbary = basis(order, points)
    d = reduced_derivatives(dbary)
    weighted = weights[:, None, None] * d
    pairs = np.einsum("qai,qbj->ijab", weighted, d, optimize=True)
    cross = [pairs[i, j] + pairs[j, i] for i, j in ((0, 1), (0, 2), (1, 2))]
    stiffness = np.stack([pairs[0, 0], pairs[1, 1], pairs[2, 2], *cross])
    mass = (values * weights[:, None]).T @ values
    stiffness.setflags(write=False)
    mass.setflags(write=False)
    return stiffness, mass


def reduced_derivatives(dbary: Floats) -> Floats:
    """(q, nloc, 3): derivatives along lambda_1..3 with lambda_0 = 1 - lambda_1 - lambda_2 - lambda_3."""
    return np.asarray(dbary[..., 1:] - dbary[..., :1])


@cache
def face_functions(order: int, face: int) -> Ints:
    """Local functions (nface,) that do not vanish on a face: its corners, edges ab, ac, bc, and its own."""
    starts = layout(order).starts
    entities = [*FACES[face], *(4 + FACE_EDGES[face]), 10 + face]
    out = np.concatenate([np.arange(starts[e], starts[e + 1]) for e in entities])
    out.setflags(write=False)
    return out


def triangle_basis(order: int, bary: Floats) -> Floats:
    """Traces (q, nface) on a face at the barycentric points (q, 3) of its sorted corners, in `face_functions` order."""
    on_face = np.column_stack([bary, np.zeros(len(bary))])
    return np.asarray(basis(order, on_face)[0][:, face_functions(order, 3)])


def triangle_derivatives(order: int, bary: Floats) -> Floats:
    """dN/dlambda (q, nface, 2) of the traces along lambda_1 and lambda_2, lambda_0 = 1 - lambda_1 - lambda_2."""
    on_face = np.column_stack([bary, np.zeros(len(bary))])
    return reduced_derivatives(basis(order, on_face)[1][:, face_functions(order, 3)])[..., :2]


@cache
def reference_face_mass(order: int) -> Floats:
    """B (nface, nface) on the reference triangle of area 1/2: B_face = 2 area B."""
    points, weights = triangle_rule(2 * order)
    values = triangle_basis(order, points)
    mass = (values * weights[:, None]).T @ values
    mass.setflags(write=False)
    return np.asarray(mass)


@cache
def face_prefix(low: int, high: int) -> Ints:
    """Positions (nface(low),) of the order-low traces among those of order high."""
    sizes = [int(function_count(k, high)) for k in (VERTEX, EDGE, FACE)]
    kept = [int(function_count(k, low)) for k in (VERTEX, EDGE, FACE)]
    kinds = [VERTEX] * 3 + [EDGE] * 3 + [FACE]
    starts = np.cumsum([0] + [sizes[k] for k in kinds])
    out = np.concatenate([starts[n] + np.arange(kept[k]) for n, k in enumerate(kinds)])
    out.setflags(write=False)
    return out
