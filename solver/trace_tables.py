"""The tables behind what-ifs: what every panel hears of every load, of every ear and of every other panel.

T_j is a real basis of the traces that the baseline's fields and the receivers' adjoints z leave on panel j, orthonormal in the
panel's mass matrix B_j. For every line once,

    G = T^T B A_0^-1 B T,   t_l = T^T B A_0^-1 f_l,   t_z = T^T B z,   p_l = z^T f_l.

Two savings. A_0^-1 B T is not solved on every line: a model that holds the sweep's basis and A_0^-1 B T of a few lines gives
it (near fields change slowly), checked on held-out lines. And what a panel hears of all that is not itself needs fewer vectors
than its own near field: Q_j, one for a band of neighbouring lines, spans t_l, t_z and G_jk of the other panels, so that only
G_jj is kept whole and everything else is kept on Q.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import partial
from itertools import pairwise
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
import scipy.linalg
import scipy.sparse as sp

from murmesh.solver.assembly import surface_mass
from murmesh.solver.case.model import Case
from murmesh.solver.engine import Engine
from murmesh.solver.receiver_points import Samples, locate_receivers
from murmesh.solver.reduced import orthonormal, reduce
from murmesh.solver.result import Result
from murmesh.solver.space import Side, Space
from murmesh.solver.system import Projected, System, Values, build_system, widened
from murmesh.solver.treatment import Option

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
Single = npt.NDArray[np.complex64]
Real = npt.NDArray[np.float32]

VECTORS, TAIL = 36, 3e-4
"""Largest number of trace vectors per panel, and the part of the traces' size that may be left out."""
NEAR_FIELD_LINES = (0.15, 0.97)
"""Where in the list of lines A_0^-1 B T is solved in full."""
HELD_OUT_LINES = (0.35, 0.85)
NEAR_FIELD_PART = 1e-2
"""Part of a unit vector that must be new for a near field to enter the basis."""
BAND_LINES = 15
"""Neighbouring lines that share a basis Q of what comes from afar."""
FAR_PART = 0.004
"""Part of what comes from afar that Q may miss: 0.005 dB with five walls of a box at once (0.03: 0.09 dB)."""


@dataclass(frozen=True, eq=False)
class Patch:
    """One side of a panel that may carry a wall, with the mass matrix B (n, n) of the side."""

    side: Side
    panel: str
    mass: sp.csr_matrix


@dataclass(frozen=True, eq=False)
class Near:
    """One patch in a band of lines, on T: G_jj (nf, n, n), t_l (nf, n, loads) of every load case, t_z (nf, n, samples); its Q
    (n, r), and the places of Q's coordinates in the band's tables."""

    g: Single
    traces: tuple[Single, ...]
    adjoints: Single
    basis: Floats
    columns: slice


@dataclass(frozen=True, eq=False)
class Response:
    """What a wall D does to its panel in a band: D S on Q (nf, r, r) and, per load case, the part of t_z^T D S t_l that Q
    misses (nf, samples, loads); S = (I + G_jj D)^-1."""

    on_far: Single
    missed: tuple[Single, ...]


@dataclass(frozen=True, eq=False)
class BandTables:
    """The tables of neighbouring lines, in the coordinates of Q of every patch one after the other: G (nf, m, m), traces t_l
    (nf, m, loads) and pressures p_l (nf, samples, loads) of every load case, adjoint traces t_z (nf, m, samples)."""

    lines: slice
    near: tuple[Near, ...]
    coupling: Single
    traces: tuple[Single, ...]
    pressures: tuple[Complex, ...]
    adjoints: Single

    def response(self, patch: int, added: Complex) -> Response:
        """What a wall with D = i w dY (all lines) does; the laws and the neighbours are not asked."""
        near, d = self.near[patch], added[self.lines, None, None]
        count, (size, rank) = len(d), near.basis.shape
        closed = np.eye(size) + near.g * d
        basis = np.broadcast_to(near.basis.astype(np.complex128), (count, size, rank))
        solved = d * np.linalg.solve(closed, np.concatenate([basis, *near.traces], axis=2))
        on_far = np.asarray(near.basis.T @ solved[:, :, :rank], dtype=np.complex64)
        heard, missed = np.swapaxes(near.adjoints, 1, 2), []
        far_heard, start = np.swapaxes(self.adjoints[:, near.columns], 1, 2), rank
        for trace, far in zip(near.traces, self.traces, strict=True):
            stop = start + trace.shape[2]
            seen = far_heard @ (on_far @ far[:, near.columns])
            missed.append(np.asarray(heard @ solved[:, :, start:stop] - seen, dtype=np.complex64))
            start = stop
        return Response(on_far, tuple(missed))

    def pressure(self, walls: Sequence[tuple[int, Response]], load_case: int, weight: Complex) -> Complex:
        """p (nf, samples, r) of weighted loads (nf, loads, r) with walls: pairs of a patch and its response.

            b_j = D_j S_j (t_j - sum_k G_jk b_k),   p = p_l - t_z^T b - what Q misses of every wall alone,   k not j

        Single precision moves a gain by 1e-5 dB and halves the time.
        """
        bare = np.asarray(self.pressures[load_case] @ weight)
        if not walls:
            return bare
        columns = [self.near[j].columns for j, _ in walls]
        at = np.concatenate([np.arange(c.start, c.stop) for c in columns])
        heard = self.traces[load_case][:, at] @ weight.astype(np.complex64)
        system = np.empty((len(bare), len(at), len(at)), dtype=np.complex64)
        right = np.empty_like(heard)
        ends = np.cumsum([0, *(c.stop - c.start for c in columns)])
        blocks = [slice(int(a), int(b)) for a, b in pairwise(ends)]
        for (_, response), rows, row in zip(walls, blocks, columns, strict=True):
            for block, column in zip(blocks, columns, strict=True):
                system[:, rows, block] = response.on_far @ self.coupling[:, row, column]
            system[:, rows, rows] = np.eye(rows.stop - rows.start)
            right[:, rows] = response.on_far @ heard[:, rows]
        taken = _solved_after(blocks[0].stop, system, right)
        missed = np.sum([response.missed[load_case] for _, response in walls], axis=0) @ weight
        return np.asarray(bare - np.swapaxes(self.adjoints[:, at], 1, 2) @ taken - missed, dtype=np.complex128)


def _solved_after(first: int, system: Single, right: Single) -> Single:
    """system^-1 right (nf, m, r), where the leading `first` rows and columns are those of the unit matrix."""
    if first == right.shape[1]:
        return right
    above, below = system[:, :first, first:], system[:, first:, :first]
    rest = np.linalg.solve(system[:, first:, first:] - below @ above, right[:, first:] - below @ right[:, :first])
    return np.concatenate([right[:, :first] - above @ rest, rest], axis=1)


@dataclass(frozen=True, eq=False)
class Reduction:
    """What tables are made from: the sum on W (K columns), W^T B T (K, m) and B T (n, m), and the columns of every patch.

    Only the coefficients depend on laws and losses, so the same reduction serves a case with other residual damping.
    """

    projected: Projected
    rows: Floats
    loads: Floats
    places: tuple[slice, ...]

    def bands(self, engine: Engine, values: list[Values], report: Callable[[str], None]) -> tuple[list[BandTables], float]:
        """The tables of every band of lines, and the largest relative error of G on the held-out lines."""
        on = _Projection.of(engine.system.on(self.projected), values[-1], self.rows)
        bands, worst = [], 0.0
        for lines in _bands(len(values)):
            report(f"tables of lines {lines.start + 1} to {lines.stop} of {len(values)}")
            full = _Full.of(lines, [on.line(each).tables() for each in values[lines]])
            for index in set(range(lines.start, lines.stop)) & set(_places(HELD_OUT_LINES, len(values))):
                exact = self.loads.T @ solved_traces(engine, values[index], self.loads)
                size = max(float(np.linalg.norm(exact)), 1e-300)
                worst = max(worst, float(np.linalg.norm(full.g[index - lines.start] - exact)) / size)
            bands.append(full.compressed(self.places))
        return bands, worst


@dataclass(frozen=True, eq=False)
class TraceTables:
    """All lines of one solved case: patches, receivers' sample points, bands, and the largest relative error of G on the
    held-out lines."""

    space: Space
    samples: Samples
    patches: tuple[Patch, ...]
    reduction: Reduction
    bands: tuple[BandTables, ...]
    held_out: float

    def retold(self, case: Case, report: Callable[[str], None] = lambda words: None) -> TraceTables:
        """The tables of a case that differs in nothing but its residual damping; nothing is solved but the held-out lines."""
        space = replace(self.space, case=case)
        engine = Engine.of(build_system(space, self.samples))
        bands, held_out = self.reduction.bands(engine, engine.system.values(case.sweep.frequencies), report)
        return replace(self, space=space, bands=tuple(bands), held_out=held_out)


def trace_tables(result: Result, choices: tuple[Option, ...], report: Callable[[str], None]) -> TraceTables:
    """Tables for the panels of some options, on the basis of the result's reduced model or, where its lines were solved
    directly, on one grown for the purpose."""
    samples = locate_receivers(result.case, result.space.geometry)
    system = build_system(result.space, samples)
    engine, values = Engine.of(system), system.values(result.frequencies)
    if result.model is not None:
        held, fixed = result.model.basis.astype(np.float64), result.model.projected.fixed
    else:
        model, _, _ = reduce(engine, samples, values, result.case.sweep.tolerance)
        held, fixed = model.basis, model.projected.fixed
    basis = orthonormal(np.zeros((system.size, 0)), held[:, ~fixed])
    patches, reduction = _Builder(result, engine, values, basis, choices, report).reduction()
    bands, held_out = reduction.bands(engine, values, report)
    return TraceTables(result.space, samples, tuple(patches), reduction, tuple(bands), held_out)


@dataclass(frozen=True, eq=False)
class _Builder:
    """What a reduction is made from: the full sum, the sweep's basis, and the panels that may carry a wall."""

    result: Result
    engine: Engine
    values: list[Values]
    basis: Floats
    choices: tuple[Option, ...]
    report: Callable[[str], None]

    @property
    def system(self) -> System:
        return self.engine.system

    def reduction(self) -> tuple[list[Patch], Reduction]:
        self.report("traces on the panels")
        patches, traces = self._patches()
        loads = np.hstack([np.asarray(p.mass @ t) for p, t in zip(patches, traces, strict=True)] or [self.basis[:, :0]])
        self.report(f"near fields of {loads.shape[1]} trace vectors on {len(patches)} panels")
        projected, w = self._project(np.hstack([self.basis, self._near_fields(loads)]))
        ends = np.cumsum([0, *(t.shape[1] for t in traces)])
        places = tuple(slice(int(a), int(b)) for a, b in pairwise(ends))
        return patches, Reduction(projected, np.asarray(w.T @ loads), loads, places)

    # -- traces

    def _patches(self) -> tuple[list[Patch], list[Floats]]:
        """Patches of every panel with an option that changes its wall, and B-orthonormal trace bases (n, m)."""
        case, space = self.result.case, self.result.space
        walls = {t.name for t in case.catalogue if t.wall is not None}
        panels = dict.fromkeys(o.panel for o in self.choices if o.treatment in walls)
        snapshots = self._snapshots() if panels else np.zeros((self.basis.shape[1], 0))
        patches, traces = [], []
        for side in space.sides:
            panel = case.surfaces[side.surface].name
            if panel not in panels:
                continue
            mass = widened(partial(surface_mass, space.geometry, space.dofs, side.tet, side.face), space, 2).tocsr()
            patches.append(Patch(side, panel, mass))
            traces.append(self._trace(mass, snapshots))
        return patches, traces

    def _snapshots(self) -> Floats:
        """Fields of every load and adjoints of every sample, in the basis, real and imaginary parts, of equal size."""
        model = self.system.on(self._project(self.basis)[0])
        on = _Projection.of(model, self.values[-1], np.zeros((len(model.fixed), 0)))
        lines = [on.line(values) for values in self.values]
        columns = [on.scale[:, None] * np.hstack([*line.fields(), line.solve(line.heard.T, trans=1)]) for line in lines]
        parts = np.hstack([part for block in columns for part in (block.real, block.imag)])[~model.fixed]
        size = np.linalg.norm(parts, axis=0)
        return np.asarray(parts[:, size > 0] / size[size > 0])

    def _trace(self, mass: sp.csr_matrix, snapshots: Floats) -> Floats:
        """The leading traces: eigenvectors of the snapshots' correlation in the inner product of B."""
        gram = self.basis.T @ (mass @ self.basis)
        values, vectors = np.linalg.eigh(gram)
        kept = values > 1e-12 * values.max()
        root = vectors[:, kept] * np.sqrt(values[kept])
        left = _leading(root.T @ snapshots)
        return np.asarray(self.basis @ (vectors[:, kept] / np.sqrt(values[kept]) @ left))

    # -- A^-1 B T

    def _near_fields(self, loads: Floats) -> Floats:
        """A_0^-1 B T at a few lines, real and imaginary parts, orthonormal and new to the basis."""
        found, basis = [], self.basis
        for index in _places(NEAR_FIELD_LINES, len(self.values)):
            exact = solved_traces(self.engine, self.values[index], loads)
            new = orthonormal(basis, np.hstack([exact.real, exact.imag]), NEAR_FIELD_PART)
            found.append(new)
            basis = np.hstack([basis, new])
        return np.hstack(found)

    def _project(self, basis: Floats) -> tuple[Projected, Floats]:
        """The sum on W = [prescribed shapes, basis], and W."""
        system, shapes = self.system, self.system.prescribed_shapes
        projected, held = Projected.empty(system), np.zeros((system.size, 0))
        for columns, prescribed in ((shapes, True), (basis, False)):
            right = [np.asarray(term.matrix @ columns) for term in system.terms]
            left = right if system.symmetric else [np.asarray(term.matrix.T @ columns) for term in system.terms]
            projected = projected.extended(system, held, columns, (right, left), prescribed=prescribed)
            held = np.hstack([held, columns])
        return projected, held


def solved_traces(engine: Engine, values: Values, loads: Floats) -> Complex:
    """A_0^-1 of real columns (n, m) at a line, by the sparse solver."""
    factor = engine.factor(engine.system.matrix(values.phi))
    out = np.zeros(loads.shape, dtype=np.complex128)
    out[engine.free] = factor.solve(np.ascontiguousarray(loads[engine.free], dtype=np.complex128))
    return out


@dataclass(frozen=True, eq=False)
class _Full:
    """Tables of neighbouring lines on T, before they are compressed."""

    lines: slice
    g: Single
    traces: tuple[Single, ...]
    pressures: tuple[Complex, ...]
    adjoints: Single

    @classmethod
    def of(cls, lines: slice, found: Sequence[tuple[Single, list[Single], list[Complex], Single]]) -> _Full:
        g, traces, pressures, adjoints = zip(*found, strict=True)
        sets = range(len(traces[0]))
        by_set = [tuple(np.stack([line[i] for line in part]) for i in sets) for part in (traces, pressures)]
        return cls(lines, np.stack(g), by_set[0], by_set[1], np.stack(adjoints))

    def compressed(self, places: tuple[slice, ...]) -> BandTables:
        """The same on Q of every patch."""
        bases = tuple(self._far_basis(place) for place in places)
        ends = np.cumsum([0, *(basis.shape[1] for basis in bases)])
        columns = tuple(slice(int(a), int(b)) for a, b in pairwise(ends))
        whole = scipy.linalg.block_diag(*bases) if bases else np.zeros((0, 0))
        near = tuple(self._near(*each) for each in zip(places, bases, columns, strict=True))
        coupling, adjoints = (_single(whole.T @ rows) for rows in (self.g @ whole, self.adjoints))
        traces = tuple(_single(whole.T @ t) for t in self.traces)
        return BandTables(self.lines, near, coupling, traces, self.pressures, adjoints)

    def _near(self, place: slice, basis: Floats, columns: slice) -> Near:
        traces = tuple(_single(trace[:, place]) for trace in self.traces)
        return Near(_single(self.g[:, place, place]), traces, _single(self.adjoints[:, place]), basis, columns)

    def _far_basis(self, place: slice) -> Floats:
        """Q (n, r): what reaches the panel from loads, ears and other panels, each weighted by what there is of it."""
        others = np.ones(self.g.shape[1], dtype=bool)
        others[place] = False
        primal, dual = (_sizes(np.concatenate(parts, axis=2)) for parts in (self.traces, (self.adjoints,)))
        parts = [
            self.adjoints[:, place], *(trace[:, place] for trace in self.traces),
            self.g[:, place][:, :, others] * primal[others], np.swapaxes(self.g[:, others][:, :, place], 1, 2) * dual[others],
        ]  # fmt: skip
        count = place.stop - place.start
        gram = np.zeros((count, count))
        for part in parts:
            size = np.maximum(np.linalg.norm(part, axis=(1, 2)), 1e-30)[:, None, None]
            scaled = np.moveaxis(part / size, 1, 0).reshape(count, -1)
            gram += (scaled @ scaled.conj().T).real / len(part)
        values, vectors = np.linalg.eigh(gram)
        kept = values > FAR_PART**2
        return np.asarray(vectors[:, kept])


def _sizes(traces: Complex) -> Floats:
    """Root mean square over lines of every trace coordinate's part, (m,)."""
    size = np.linalg.norm(traces, axis=2)
    return np.asarray(np.sqrt(np.mean((size / np.maximum(np.linalg.norm(size, axis=1), 1e-30)[:, None]) ** 2, axis=0)))


def _single(values: npt.NDArray[np.complexfloating[Any, Any]]) -> Single:
    return np.asarray(values, dtype=np.complex64)


def _bands(lines: int) -> list[slice]:
    """Slices of about `BAND_LINES` neighbouring lines."""
    ends = np.linspace(0, lines, max(round(lines / BAND_LINES), 1) + 1).round().astype(int)
    return [slice(int(a), int(b)) for a, b in pairwise(ends)]


def _leading(snapshots: Floats) -> Floats:
    """Orthonormal columns that hold the columns of `snapshots` best, up to the part `TAIL` of their size."""
    left, size, _ = np.linalg.svd(snapshots @ snapshots.T, hermitian=True)
    kept = np.sqrt(np.maximum(size, 0) / max(size[0], 1e-300)) > TAIL
    return np.asarray(left[:, : min(VECTORS, int(np.count_nonzero(kept)))])


def _places(parts: Sequence[float], lines: int) -> tuple[int, ...]:
    return tuple(dict.fromkeys(round(part * (lines - 1)) for part in parts))


@dataclass(frozen=True, eq=False)
class _Projection:
    """A projected sum in single precision, its unknowns scaled so that the diagonal of A is of one size: the gains of the
    demonstration change by 1e-6 dB and tables take two thirds of the time.

    matrices (terms, K, K) with the scales (K,) on both sides; rows (K, m) and receivers with them on one.
    """

    model: System
    scale: Floats
    matrices: Real
    rows: Real

    @classmethod
    def of(cls, model: System, values: Values, rows: Floats) -> _Projection:
        """For lines like that of `values`."""
        matrices = np.stack([np.asarray(term.matrix) for term in model.terms])
        diagonal = np.abs(values.phi) @ np.abs(np.einsum("jkk->jk", matrices))
        scale = 1.0 / np.sqrt(np.where(diagonal > 0, diagonal, 1.0))
        scaled = (matrices * scale[:, None] * scale).astype(np.float32)
        return cls(model, scale, scaled, (rows * scale[:, None]).astype(np.float32))

    def line(self, values: Values) -> _Line:
        """The sum at one line, factorised on its free unknowns."""
        free, matrix = ~self.model.fixed, np.empty(self.matrices.shape[1:], dtype=np.complex64)
        for part, phi in ((matrix.real, values.phi.real), (matrix.imag, values.phi.imag)):
            np.copyto(part, np.tensordot(phi.astype(np.float32), self.matrices, axes=1))
        block = matrix if free.all() else matrix[np.ix_(free, free)]
        return _Line(self, values, matrix, scipy.linalg.lu_factor(block, check_finite=False))


@dataclass(frozen=True, eq=False)
class _Line:
    """A projected sum at one line; fields are in its scaled unknowns."""

    on: _Projection
    values: Values
    matrix: Single
    lu: tuple[Single, npt.NDArray[np.int32]]

    def solve(self, right: npt.NDArray[np.inexact], trans: Literal[0, 1] = 0) -> Single:
        """A^-1 right, or A^-T right, (K, r); zero where the pressure is prescribed."""
        free = ~self.on.model.fixed
        out = np.zeros(right.shape, dtype=np.complex64)
        out[free] = scipy.linalg.lu_solve(self.lu, right[free].astype(np.complex64), trans, check_finite=False)
        return out

    def fields(self) -> list[Single]:
        """The fields (K, loads) of every load case."""
        scale = self.on.scale[:, None]
        given = [held.vectors(psi) for held, psi in zip(self.on.model.load_sets, self.values.psi, strict=True)]
        known = [np.asarray(pressure / scale, dtype=np.complex64) for _, pressure in given]
        forces = [
            force * scale - self.matrix @ k if k.any() else force * scale for (force, _), k in zip(given, known, strict=True)
        ]
        ends = np.cumsum([0, *(force.shape[1] for force in forces)])
        solved = self.solve(np.hstack(forces))
        return [solved[:, a:b] + k for (a, b), k in zip(pairwise(ends), known, strict=True)]

    @property
    def heard(self) -> Single:
        """Rows (samples, K) of the receivers."""
        rows = self.values.heard(np.asarray(self.on.model.receivers) * self.on.scale)
        return np.asarray(rows, dtype=np.complex64)

    def tables(self) -> tuple[Single, list[Single], list[Complex], Single]:
        """G, traces and pressures per load case, and adjoint traces."""
        rows, fields, heard = self.on.rows, self.fields(), self.heard
        near = self.solve(rows)
        pressures = [np.asarray(heard @ x, dtype=np.complex128) for x in fields]
        if self.values.direct:
            pressures = [p + d for p, d in zip(pressures, self.values.direct, strict=True)]
        return _times(rows, near), [_times(rows, x) for x in fields], pressures, np.asarray((heard @ near).T)


def _times(rows: Real, fields: Single) -> Single:
    """rows^T fields of real rows: one real product instead of a complex one."""
    return np.asarray(rows.T @ np.ascontiguousarray(fields).view(np.float32)).view(np.complex64)
