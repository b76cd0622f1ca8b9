"""Stiffness and mass of tetrahedra, scattered straight into their final places.

    K_ij = int grad N_i . grad N_j dV,   M_ij = int N_i N_j dV.

Straight tetrahedra: six metric terms times reference matrices, K_e = sum_m g_m R_m.  Curved ones: quadrature in chunks.
The scatter works on blocks: the pattern is that of entities (vertices, edges, faces, interiors) that share a
tetrahedron, and the place of every block in the final CSR arrays is known before a value is computed, so that
nothing is sorted, summed or stored twice per matrix entry.  Low orders, whose blocks are tiny, are summed row by row.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from murmesh.solver.dofs import DofMap
from murmesh.solver.elements.geometry import Geometry
from murmesh.solver.elements.quadrature import tetrahedron_rule
from murmesh.solver.elements.tetrahedron import basis, layout, reduced_derivatives, reference_matrices

Complex = npt.NDArray[np.complex128]
Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

_KINDS = (slice(0, 4), slice(4, 10), slice(10, 14), slice(14, 15))  # vertices, edges, faces, interior
MAX_BY_ROWS = 4
"""Up to this order, where all orders are equal, matrices are summed row by row; entities hold too little for blocks."""
_CHUNK = 100_000  # numbers held at once in a temporary: what stays in the cache is not paged in anew each time


def volume_matrices(
    geometry: Geometry, dofmap: DofMap, tets: npt.ArrayLike | None = None
) -> tuple[sp.csr_matrix, sp.csr_matrix]:
    """K = int grad q . grad p dV and M = int q p dV over the given tetrahedra (default all).

    Both (n_dofs, n_dofs), real, symmetric, with one shared pattern; units m and m^3.
    """
    subset = np.arange(len(geometry.tets)) if tets is None else np.asarray(tets, dtype=np.int64)
    n = dofmap.n_dofs
    if not len(subset):
        return sp.csr_matrix((n, n)), sp.csr_matrix((n, n))
    if dofmap.orders.min() == dofmap.max_order <= MAX_BY_ROWS:
        return _by_rows(geometry, dofmap, subset)
    pattern = _Pattern.build(dofmap, subset)
    elements = _Elements.build(geometry, dofmap, subset)
    indices = np.empty(pattern.indptr[-1], dtype=pattern.indptr.dtype)
    stiffness, mass = np.empty(len(indices)), np.empty(len(indices))
    for pairs in pattern.pairs:
        for part in pairs.parts(dofmap.sizes):
            blocks = elements.blocks(pairs, part)
            for place, order in pattern.places(pairs, part):
                _put(stiffness, place, blocks[0].transpose(order))
                _put(mass, place, blocks[1].transpose(order))
                _put(indices, place, pattern.columns(pairs, part, order))
    return _matrix(stiffness, indices, pattern.indptr, n), _matrix(mass, indices, pattern.indptr, n)


def _by_rows(geometry: Geometry, dofmap: DofMap, subset: Ints) -> tuple[sp.csr_matrix, sp.csr_matrix]:
    """K and M of tetrahedra of one order, a chunk of rows after another, as one complex matrix K + i M.

    A chunk is Q C: the rows of C are those rows of the element matrices that belong to its unknowns, Q sums them.
    """
    elements, dofs = _Elements.build(geometry, dofmap, subset), dofmap.dofs_up_to(subset, dofmap.max_order)
    n, width = dofmap.n_dofs, dofs.shape[1]
    most = dofs.size * width
    dofs = dofs.astype(np.int32 if most < 2**31 else np.int64)
    each = np.arange(dofs.size + 1, dtype=dofs.dtype)
    by_unknown = sp.csc_matrix((np.ones(dofs.size, np.int8), dofs.ravel(), each), shape=(n, dofs.size)).tocsr()
    own, first = by_unknown.indices, by_unknown.indptr  # instances, tetrahedron * width + local function, by unknown
    cuts = np.unique(np.append(np.searchsorted(first, np.arange(0, dofs.size, max(1, _CHUNK // width))), n))
    indptr = np.zeros(n + 1, dtype=dofs.dtype)
    indices = np.empty(most, dofs.dtype)  # more than needed; what is not filled is never paged in
    stiffness, mass = np.empty(most), np.empty(most)
    for low, high in itertools.pairwise(cuts.tolist()):
        tets, local = np.divmod(own[first[low] : first[high]], width)
        columns, data, order = dofs[tets], *elements.rows(tets, local)
        C = sp.csr_matrix(
            (data.ravel(), columns[order].ravel(), np.arange(0, data.size + 1, width, dtype=dofs.dtype)), shape=(len(tets), n)
        )
        starts = first[low : high + 1] - first[low]
        back = np.empty(len(tets), dtype=dofs.dtype)
        back[order] = each[: len(tets)]
        Q = sp.csr_matrix((np.ones(len(tets), dtype=complex), back, starts), shape=(high - low, len(tets)))
        chunk = Q @ C
        chunk.sort_indices()
        filled = slice(indptr[low], indptr[low] + chunk.nnz)
        stiffness[filled], mass[filled], indices[filled] = chunk.data.real, chunk.data.imag, chunk.indices
        indptr[low + 1 : high + 1] = indptr[low] + chunk.indptr[1:]
    end = indptr[-1]
    return _matrix(stiffness[:end], indices[:end], indptr, n), _matrix(mass[:end], indices[:end], indptr, n)


def stiffness(geometry: Geometry, dofmap: DofMap, tets: npt.ArrayLike | None = None) -> sp.csr_matrix:
    """K = int grad q . grad p dV over the given tetrahedra (default all), (n_dofs, n_dofs), real symmetric."""
    return volume_matrices(geometry, dofmap, tets)[0]


def mass(geometry: Geometry, dofmap: DofMap, tets: npt.ArrayLike | None = None) -> sp.csr_matrix:
    """M = int q p dV over the given tetrahedra (default all), (n_dofs, n_dofs), real symmetric."""
    return volume_matrices(geometry, dofmap, tets)[1]


def _put(target: npt.NDArray[Any], starts: Ints, blocks: npt.NDArray[Any]) -> None:
    """Write the rows of blocks (m, a, b) to target[start : start + b], starts (m, a); a run is copied as one item."""
    size, step = blocks.shape[2], target.itemsize
    if size == 1:
        target[starts] = blocks[:, :, 0]
        return
    run = np.dtype((np.void, size * step))
    runs = np.ndarray((len(target) - size + 1,), run, buffer=target, strides=(step,))
    runs[starts] = np.ascontiguousarray(blocks, dtype=target.dtype).view(run)[:, :, 0]


def _matrix(data: Floats, indices: Ints, indptr: Ints, n: int) -> sp.csr_matrix:
    out = sp.csr_matrix((data, indices, indptr), shape=(n, n), copy=False)
    out.has_sorted_indices = True
    out.has_canonical_format = True
    return out


@dataclass(frozen=True)
class _Part:
    """Pairs of one block shape, and their (tetrahedron, local pair) instances one pair after another."""

    pairs: Ints
    shape: tuple[int, int]
    instances: Ints
    counts: Ints


@dataclass(frozen=True)
class _Pairs:
    """Distinct pairs (row entity, column entity) of two kinds, ascending, and the instances behind each.

    An instance is tetrahedron * (local rows * local columns) + local row * local columns + local column.
    """

    kinds: tuple[int, int]
    rows: Ints
    cols: Ints
    order: Ints
    starts: Ints

    @staticmethod
    def build(kinds: tuple[int, int], entities: Ints, sizes: Ints) -> _Pairs:
        rows, cols = (entities[:, _KINDS[k]] for k in kinds)
        keys = (rows[:, :, None] * len(sizes) + cols[:, None, :]).ravel()
        used = np.flatnonzero(((sizes[rows] > 0)[:, :, None] & (sizes[cols] > 0)[:, None, :]).ravel())
        order = used[np.argsort(keys[used])]
        ascending = keys[order]
        first = np.flatnonzero(np.append(True, ascending[1:] != ascending[:-1])[: len(order)])
        distinct = ascending[first]
        return _Pairs(kinds, distinct // len(sizes), distinct % len(sizes), order, np.append(first, len(order)))

    @property
    def local_counts(self) -> tuple[int, int]:
        rows, cols = (int(_KINDS[k].stop - _KINDS[k].start) for k in self.kinds)
        return rows, cols

    def parts(self, sizes: Ints) -> Iterator[_Part]:
        """Pairs of equal block shape, in chunks of bounded size."""
        shapes = np.column_stack([sizes[self.rows], sizes[self.cols]])
        code = shapes[:, 0] * 10_000 + shapes[:, 1]
        for value in np.unique(code):
            a, b = divmod(int(value), 10_000)
            chosen = np.flatnonzero(code == value)
            counts = np.diff(self.starts)[chosen]
            bounds = np.searchsorted(np.cumsum(counts), np.arange(0, counts.sum(), max(1, _CHUNK // (a * b))))
            for piece in np.split(np.arange(len(chosen)), np.unique(bounds)[1:]):
                instances = self.order[_ranges(self.starts[chosen[piece]], counts[piece])]
                yield _Part(chosen[piece], (a, b), instances, counts[piece])


def _ranges(starts: Ints, counts: Ints) -> Ints:
    """starts[0] .. starts[0]+counts[0]-1, starts[1] .., one after another."""
    shift = starts - (np.cumsum(counts) - counts)
    return np.asarray(np.arange(counts.sum()) + np.repeat(shift, counts))


@dataclass(frozen=True)
class _Pattern:
    """The CSR pattern by blocks: all unknowns of an entity have rows of the same width."""

    dofmap: DofMap
    pairs: tuple[_Pairs, ...]
    indptr: Ints
    width: Ints  # (n_entities,)
    offset: dict[tuple[int, int], Ints]  # by ordered kinds: where a pair's columns start within the row

    @staticmethod
    def build(dofmap: DofMap, subset: Ints) -> _Pattern:
        entities, sizes = dofmap.entities(subset), dofmap.sizes
        table = {
            (a, b): _Pairs.build((a, b), entities, sizes)
            for a in range(4)
            for b in range(a, 4)
            if sizes[entities[:, _KINDS[a]]].any() and sizes[entities[:, _KINDS[b]]].any()
        }
        width = np.zeros(len(sizes), dtype=np.int64)
        offset = {}
        for a, b in ((a, b) for a in range(4) for b in range(4)):
            if (min(a, b), max(a, b)) in table:
                offset[a, b] = _append(width, table[min(a, b), max(a, b)], sizes, mirrored=a > b)
        indptr = np.concatenate([[0], np.cumsum(np.repeat(width, sizes))])
        small = max(int(indptr[-1]), dofmap.n_dofs) < 2**31 - 1
        return _Pattern(dofmap, tuple(table.values()), indptr.astype(np.int32 if small else np.int64), width, offset)

    def places(self, pairs: _Pairs, part: _Part) -> Iterator[tuple[Ints, tuple[int, int, int]]]:
        """Where the rows (pairs, a) of each block start in the CSR arrays, with its axes; then those of its mirror image."""
        a, b = pairs.kinds
        yield self._place(pairs.rows, self.offset[a, b], part.pairs, part.shape), (0, 1, 2)
        if a != b:
            yield self._place(pairs.cols, self.offset[b, a], part.pairs, part.shape[::-1]), (0, 2, 1)

    def _place(self, rows: Ints, offset: Ints, chosen: Ints, shape: tuple[int, int]) -> Ints:
        row = rows[chosen]
        start = self.indptr[self.dofmap.offsets[row]] + offset[chosen]
        return np.asarray(start[:, None] + np.arange(shape[0]) * self.width[row][:, None])

    def columns(self, pairs: _Pairs, part: _Part, order: tuple[int, int, int]) -> Ints:
        """Column numbers (pairs, a, b) of the block, or of its mirror image."""
        entity, (a, b) = (pairs.cols, part.shape) if order == (0, 1, 2) else (pairs.rows, part.shape[::-1])
        numbers = (self.dofmap.offsets[entity[part.pairs]][:, None] + np.arange(b)).astype(self.indptr.dtype)
        return np.broadcast_to(numbers[:, None, :], (len(numbers), a, b))


def _append(width: Ints, pairs: _Pairs, sizes: Ints, *, mirrored: bool) -> Ints:
    """Append the columns of one kind to the rows of another; returns where those of each pair start, widens `width`."""
    rows, cols = (pairs.cols, pairs.rows) if mirrored else (pairs.rows, pairs.cols)
    order = np.argsort(rows, kind="stable") if mirrored else np.arange(len(rows))
    row, size = rows[order], sizes[cols[order]]
    before = np.cumsum(size) - size
    first = np.append(True, row[1:] != row[:-1])[: len(row)]
    within = before - np.repeat(before[first], np.diff(np.append(np.flatnonzero(first), len(row))))
    out = np.empty(len(rows), dtype=np.int64)
    out[order] = width[row] + within
    np.add.at(width, row, size)
    return out


@dataclass(frozen=True)
class _Bent:
    """Element matrices of the curved tetrahedra of one order; place (subset,) is -1 for all others."""

    place: Ints
    starts: Ints
    stiffness: Floats
    mass: Floats


@dataclass(frozen=True)
class _Elements:
    """What the element matrices are made of: metrics (m, 6) and |det J| (m,), reference matrices, curved ones."""

    metric: Floats
    det: Floats
    starts: Ints
    reference: tuple[Floats, Floats]
    bent: tuple[_Bent, ...]

    @staticmethod
    def build(geometry: Geometry, dofmap: DofMap, subset: Ints) -> _Elements:
        order = int(dofmap.orders[subset].max())
        gradients, det = geometry.straight_jacobians
        ascending = dofmap.topology.sorted_vertices[subset][:, 1:, None]
        inner = np.take_along_axis(gradients[subset], ascending, axis=1)
        metric = _metric(inner) * det[subset][:, None]
        bent = []
        for p, which in dofmap.order_groups(subset):
            curved = which[geometry.curved[subset[which]]]
            if len(curved):
                place = np.full(len(subset), -1, dtype=np.int64)
                place[curved] = np.arange(len(curved))
                bent.append(_Bent(place, layout(p).starts, *curved_matrices(geometry, dofmap, subset[curved], p)))
        return _Elements(metric, det[subset], layout(order).starts, reference_matrices(order), tuple(bent))

    def blocks(self, pairs: _Pairs, part: _Part) -> tuple[Floats, Floats]:
        """Blocks (pairs, a, b) of K and M, summed over the instances of each pair."""
        rows, cols = pairs.local_counts
        tets, local = np.divmod(part.instances, rows * cols)
        order = np.argsort(local.astype(np.uint8), kind="stable")  # instances of one local pair next to each other
        bounds = np.searchsorted(local[order], np.arange(rows * cols + 1))
        each = np.empty((2, len(tets), part.shape[0] * part.shape[1]))
        for pair in range(rows * cols):
            chosen = slice(bounds[pair], bounds[pair + 1])
            a, b = divmod(pair, cols)
            corner = _KINDS[pairs.kinds[0]].start + a, _KINDS[pairs.kinds[1]].start + b
            self._fill(each[:, chosen], tets[order[chosen]], corner, part.shape)
        indptr = np.concatenate([[0], np.cumsum(part.counts)])
        add = sp.csr_matrix((np.ones(len(tets)), np.argsort(order), indptr), shape=(len(part.counts), len(tets)))
        return (add @ each[0]).reshape(-1, *part.shape), (add @ each[1]).reshape(-1, *part.shape)

    def rows(self, tets: Ints, local: Ints) -> tuple[Complex, Ints]:
        """Rows (m, nloc) of K_e + i M_e, the local functions `local` of `tets`, in the returned order (m,) of them."""
        width = len(self.reference[1])
        order = np.argsort(local.astype(np.uint8), kind="stable")  # rows of one local function next to each other
        bounds = np.searchsorted(local[order], np.arange(width + 1))
        tets = tets[order]
        metric, det = self.metric[tets], self.det[tets][:, None]
        out = np.empty((len(tets), width), dtype=np.complex128)
        for i in range(width):
            same = slice(bounds[i], bounds[i + 1])
            out.real[same] = metric[same] @ self.reference[0][:, i]
            out.imag[same] = det[same] * self.reference[1][i]
        for bent in self.bent:
            place = bent.place[tets]
            curved = np.flatnonzero(place >= 0)
            out.real[curved] = bent.stiffness[place[curved], local[order[curved]]]
            out.imag[curved] = bent.mass[place[curved], local[order[curved]]]
        return out, order

    def _fill(self, out: Floats, tets: Ints, corner: tuple[int, int], shape: tuple[int, int]) -> None:
        """Element blocks (2, m, a b) of local entities `corner`; a lower order is a prefix of the reference."""
        size = shape[0] * shape[1]
        a, b = _slices(self.starts, corner, shape)
        out[0] = self.metric[tets] @ self.reference[0][:, a, b].reshape(6, size)
        out[1] = self.det[tets][:, None] * self.reference[1][a, b].reshape(size)
        for bent in self.bent:
            place = bent.place[tets]
            curved = place >= 0
            if np.any(curved):
                a, b = _slices(bent.starts, corner, shape)
                out[0, curved] = bent.stiffness[place[curved], a, b].reshape(-1, size)
                out[1, curved] = bent.mass[place[curved], a, b].reshape(-1, size)


def _slices(starts: Ints, corner: tuple[int, int], shape: tuple[int, int]) -> tuple[slice, slice]:
    """The first functions of two local entities."""
    (a, b), (m, n) = corner, shape
    return slice(int(starts[a]), int(starts[a]) + m), slice(int(starts[b]), int(starts[b]) + n)


def _metric(inner: Floats) -> Floats:
    """(m, 6): g1.g1, g2.g2, g3.g3, g1.g2, g1.g3, g2.g3 of gradients (m, 3, 3)."""
    pairs = ((0, 0), (1, 1), (2, 2), (0, 1), (0, 2), (1, 2))
    return np.stack([np.einsum("md,md->m", inner[:, i], inner[:, j]) for i, j in pairs], axis=1)


def curved_matrices(geometry: Geometry, dofmap: DofMap, tets: Ints, order: int) -> tuple[Floats, Floats]:
    """K_e and M_e (m, nloc, nloc) by quadrature of degree 2p + 3: exact for M, det J being a cubic."""
    points, weights = tetrahedron_rule(2 * order + 3)
    values, dbary = basis(order, points)
    n = values.shape[1]
    d = np.ascontiguousarray(reduced_derivatives(dbary).transpose(0, 2, 1))  # (q, 3, nloc)
    stiffness, mass = np.empty((len(tets), n, n)), np.empty((len(tets), n, n))
    step = max(1, _CHUNK // d.size)
    for start in range(0, len(tets), step):
        part = slice(start, start + step)
        ascending = dofmap.topology.sorted_vertices[tets[part]]
        own = points[:, np.argsort(ascending, axis=1)].transpose(1, 0, 2)  # in each tetrahedron's own corner order
        gradients, det = geometry.jacobians(tets[part], own)
        inner = np.take_along_axis(gradients, ascending[:, None, 1:, None], axis=2)
        scale = det * weights
        tensor = np.einsum("kqid,kqjd,kq->kqij", inner, inner, scale, optimize=True)
        flux = np.matmul(tensor, d).reshape(len(ascending), -1, n)
        stiffness[part] = np.matmul(d.reshape(-1, n).T, flux)
        mass[part] = np.matmul(values.T, scale[..., None] * values)
    return stiffness, mass
