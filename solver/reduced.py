"""The reduced model of a sweep: the same sum of terms on a few hundred unknowns, and the certificate that it may be trusted.

    p = W y,   W^T A(w) W y = W^T f(w),   A(w) = sum_j phi_j(w) A_j with the exact phi_j at every line

W holds, at each *expansion line* w_0, the exact adjoints of the receivers and the exact fields of the load cases, and the
Krylov vectors that follow them,

    v_{k+1} = -A(w_0)^{-1} A'(w_0) v_k,   A' = dA/d(w^2)     (block Arnoldi, real and imaginary parts, orthonormal),

so that one factorisation serves a whole neighbourhood of lines. Forward and adjoint spaces are one: an output is wrong by
the *product* of what both spaces miss. (Arnoldi's moments: Z. Bai, Appl. Numer. Math. 43 (2002) 9; primal and dual spaces
together: K. Willcox and A. Megretski, SIAM J. Sci. Comput. 26 (2005) 944; both cited from memory.)

No line is trusted because a residual is small. The model is certified when it agrees with `PASSES` further lines, solved
directly and never seen by it, one of them the line with the worst estimate; a line that disagrees becomes an expansion.
Where no certificate can be had, `reduce` says so and the caller solves every line directly.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.linalg

from murmesh.solver.engine import Drive, Engine, Line, Response
from murmesh.solver.linalg import Factor
from murmesh.solver.receiver_points import Samples
from murmesh.solver.system import LoadSet, LoadTerm, Projected, Stack, System, Values

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
Ints = npt.NDArray[np.int64]

FIRST_LINES = (0.06, 0.4, 0.7, 0.95)
"""Where in the band the first expansion lines lie: modes crowd towards its upper end."""
KRYLOV_COLUMNS = 32
"""Krylov vectors wanted per expansion line, in blocks of the start's width, at least `FEWEST_MOMENTS` blocks."""
FEWEST_MOMENTS, MOST_MOMENTS = 3, 8
KEEP_ABOVE = 1e-5
"""Part of a unit vector that must be new for it to enter the basis."""
PASSES = 3
"""Lines in a row, unseen by the model, that must agree."""
PASS_PART = 0.3
"""Part of the tolerance that an agreeing line may be off."""
FIELD_TOLERANCE = 0.1
"""Deviation [dB] that an agreeing line's whole field may have, root mean square over the mesh's vertices."""
SKETCH = 64
"""Rows of the random matrix that measures residuals."""
LARGEST_PART, SMALL = 0.5, 600
"""Part of the system's unknowns that a model may have; models below `SMALL` are cheap in any case."""
SCANNED_LINES = 60
"""Lines at which the estimate is looked at while the basis grows."""
SMALLEST_ESTIMATE = 1e-5
"""Estimates [dB] below which the ratio to the true deviation tells of rounding only."""
DB = 20 / np.log(10)


@dataclass(frozen=True)
class Check:
    """A line solved directly, and how far the model that had not seen it was off [dB]: the worst level or contribution
    at a receiver, the whole field, and what the estimate had said. `grew` tells whether the line then entered the basis."""

    frequency: float
    deviation: float
    field: float
    estimate: float
    grew: bool

    def agrees(self, tolerance: float) -> bool:
        """Whether the line speaks for the model."""
        return self.deviation <= PASS_PART * tolerance and self.field <= FIELD_TOLERANCE

    @classmethod
    def of(cls, row: Floats) -> Check:
        """From its numbers in the order of the fields."""
        deviation_, field, estimate = (float(v) for v in row[1:4])
        return cls(float(row[0]), deviation_, field, estimate, bool(row[4]))


@dataclass(frozen=True, eq=False)
class Certificate:
    """Why the lines of a reduced sweep may be trusted, or that they may not.

    tolerance [dB]; certified; checks: every line that was factorised, in order; estimate (nf,) [dB] of every line's
    deviation, scaled by the worst ratio seen at the checks; size: unknowns of the model.
    """

    tolerance: float
    certified: bool
    checks: tuple[Check, ...]
    estimate: Floats
    size: int

    @property
    def factorisations(self) -> int:
        """Factorised lines."""
        return len(self.checks)

    @property
    def worst_check(self) -> float:
        """Largest deviation [dB] among the lines that the model agreed with last."""
        return max(check.deviation for check in self.checks[-PASSES:])

    @property
    def words(self) -> str:
        """One sentence for people."""
        if not self.certified:
            return (
                f"no certificate for {self.tolerance:g} dB after {self.factorisations} factorised lines: "
                "every line was solved directly"
            )
        return (
            f"certified within {self.tolerance:g} dB of the direct solution: {self.factorisations} factorised lines, "
            f"{self.size} unknowns in the model; the last {PASSES}, unseen by the model, agree within "
            f"{self.worst_check:.1e} dB, and its own estimate is at most {float(self.estimate.max(initial=0.0)):.1e} dB"
        )


@dataclass(frozen=True, eq=False)
class Step:
    """One factorised line of the construction, as the journal keeps it: columns (n, k) added to the basis, maybe none."""

    index: int
    line: Line
    columns: Floats
    check: Check


@dataclass(frozen=True, eq=False)
class Reduction:
    """A model under construction: basis (n, K), prescribed shapes first, its projection, and the sketched residuals."""

    system: System
    samples: Samples
    basis: Floats
    projected: Projected
    sketch: Sketch
    steps: tuple[Step, ...] = ()

    @classmethod
    def start(cls, system: System, samples: Samples) -> Reduction:
        """The model without any expansion line."""
        shapes = system.prescribed_shapes
        empty = cls(system, samples, np.zeros((system.size, 0)), Projected.empty(system), Sketch.start(system))
        return empty.with_columns(shapes, prescribed=True)

    def with_columns(self, columns: Floats, *, prescribed: bool = False) -> Reduction:
        """The model with more columns in its basis."""
        right = [np.asarray(term.matrix @ columns) for term in self.system.terms]
        left = right if self.system.symmetric else [np.asarray(term.matrix.T @ columns) for term in self.system.terms]
        projected = self.projected.extended(self.system, self.basis, columns, (right, left), prescribed=prescribed)
        sketch = self.sketch.extended(right, left)
        return replace(self, basis=np.hstack([self.basis, columns]), projected=projected, sketch=sketch)

    def with_step(self, step: Step) -> Reduction:
        """The model after one more factorised line."""
        grown = self.with_columns(step.columns) if step.columns.shape[1] else self
        return replace(grown, steps=(*self.steps, step))

    def engine(self) -> Engine:
        """Solves lines of the model."""
        return Engine.of(self.system.on(self.projected))

    @property
    def size(self) -> int:
        """Free unknowns of the model."""
        return int(np.count_nonzero(~self.projected.fixed))


@dataclass(frozen=True, eq=False)
class Sketch:
    """Norms of residuals from a few rows: |r| ~ |S r|, S = T D^-1/2 with random signs T / sqrt(rows), D = sum_j |phi_j A_j|_ii
    in the middle of the band.

    matrix (rows, n); forward, adjoint (terms, rows, K): S A_j W and S A_j^T W; load_sets with vectors S F; receivers
    (rows, samples). (Signs preserve norms: D. Achlioptas, J. Comput. Syst. Sci. 66 (2003) 671; cited from memory.)
    """

    matrix: Floats
    forward: Floats
    adjoint: Floats
    load_sets: tuple[LoadSet, ...]
    receivers: Floats

    @classmethod
    def start(cls, system: System) -> Sketch:
        """Without any column of W."""
        middle = np.median(system.space.case.sweep.frequencies, keepdims=True)
        phi = np.abs(system.coefficients(middle)[0])
        diagonal = sum(c * np.abs(term.matrix.diagonal()) for c, term in zip(phi, system.terms, strict=True))
        signs = np.random.default_rng(0).choice((-1.0, 1.0), size=(SKETCH, system.size))
        matrix = np.where(system.fixed, 0.0, signs / np.sqrt(SKETCH * np.maximum(diagonal, 1e-300)))
        none = np.zeros((len(system.terms), SKETCH, 0))
        sets = tuple(replace(held, terms=tuple(_sketched(t, matrix) for t in held.terms)) for held in system.load_sets)
        return cls(matrix, none, none, sets, np.asarray((system.receivers @ matrix.T).T))

    def extended(self, right: list[Floats], left: list[Floats]) -> Sketch:
        """With the products A_j columns and A_j^T columns."""
        forward = np.concatenate([self.forward, np.stack([self.matrix @ product for product in right])], axis=2)
        if left is right:
            return replace(self, forward=forward, adjoint=forward)
        adjoint = np.concatenate([self.adjoint, np.stack([self.matrix @ product for product in left])], axis=2)
        return replace(self, forward=forward, adjoint=adjoint)

    def forward_residuals(self, number: int, values: Values, fields: Complex) -> Complex:
        """S (f_l - A W y_l) of every load of load case `number`, (rows, loads), from the fields (K, loads)."""
        forces = self.load_sets[number].vectors(values.psi[number])[0]
        return np.asarray(forces - Stack(self.forward).combine(values.phi) @ fields)

    def adjoint_residual(self, values: Values, adjoints: Complex) -> Floats:
        """|e - A^T W z| of every receiver sample, (samples,)."""
        return np.asarray(
            np.linalg.norm(values.heard(self.receivers.T).T - Stack(self.adjoint).combine(values.phi) @ adjoints, axis=0)
        )


def _sketched(term: LoadTerm, matrix: Floats) -> LoadTerm:
    vectors = np.zeros((SKETCH, term.vectors.shape[1])) if term.fixes else np.asarray(term.vectors.T @ matrix.T).T
    return replace(term, build=lambda: vectors)


# ---------------------------------------------------------------------------------------------------------------------
# growing


def reduce(
    full: Engine,
    samples: Samples,
    lines: list[Values],
    tolerance: float,
    *,
    steps: Iterable[Step] = (),
    keep: Callable[[int, Step], None] = lambda number, step: None,
    report: Callable[[Reduction], None] = lambda model: None,
    lighten: Callable[[Values, Line], Line] = lambda values, line: line,
) -> tuple[Reduction, Certificate, list[Line]]:
    """Grow a model of `full` until it is certified to `tolerance` [dB] on every line, or has cost a quarter of the lines.

    `steps` are those of an interrupted run; `keep` is called with each new one as soon as it is known; `lighten` says what
    is kept of an exact line. Returned with the certificate: every line from the model, in its coordinates and without a
    residual (nan); none where there is no certificate.
    """
    model = Reduction.start(full.system, samples)
    for step in steps:
        model = model.with_step(step)
    doubted = -1  # a line to look at although the last ones agreed
    while True:
        if _agreed(model, tolerance):
            found, estimate = survey(model, lines)
            if estimate.max() <= tolerance:
                return model, Certificate(tolerance, True, _checks(model), estimate, model.size), found
            doubted = _most_doubtful(model, estimate)
        if not _worth_growing(model, len(lines)):
            return model, Certificate(tolerance, False, _checks(model), np.full(len(lines), np.inf), model.size), []
        step = _next_step(full, model, lines, tolerance, doubted)
        step = replace(step, line=lighten(lines[step.index], step.line))
        keep(len(model.steps), step)
        model = model.with_step(step)
        report(model)


def _checks(model: Reduction) -> tuple[Check, ...]:
    return tuple(step.check for step in model.steps)


def _most_doubtful(model: Reduction, estimate: Floats) -> int:
    """The line with the worst estimate among those not factorised yet."""
    unseen = np.setdiff1d(np.arange(len(estimate)), [step.index for step in model.steps])
    return int(unseen[np.argmax(estimate[unseen])]) if len(unseen) else -1


def _worth_growing(model: Reduction, lines: int) -> bool:
    """Neither too many factorised lines nor so many unknowns that the model's dense lines cost what sparse ones do."""
    return len(model.steps) < most_lines(lines) and model.size <= max(LARGEST_PART * model.system.size, SMALL)


def most_lines(lines: int) -> int:
    """Factorised lines after which a certificate is given up: a quarter of all, at least twelve."""
    return min(lines, max(12, lines // 4))


def _agreed(model: Reduction, tolerance: float) -> bool:
    last = model.steps[-PASSES:]
    return len(model.steps) >= len(FIRST_LINES) + PASSES - 1 and all(step.check.agrees(tolerance) for step in last)


def _next_step(full: Engine, model: Reduction, lines: list[Values], tolerance: float, doubted: int) -> Step:
    index = doubted if doubted >= 0 else _next_line(model, lines, tolerance)
    line, factor = full.solved(lines[index])
    check = _check(model, lines[index], line)
    grows = doubted >= 0 or len(model.steps) < len(FIRST_LINES) or not check.agrees(tolerance)
    columns = _new_columns(full, model, line, factor, _frequencies(lines)) if grows else np.zeros((full.system.size, 0))
    return Step(index, line, columns, replace(check, grew=grows))


def _frequencies(lines: list[Values]) -> Floats:
    return np.array([values.frequency for values in lines])


def _next_line(model: Reduction, lines: list[Values], tolerance: float) -> int:
    """The first lines; then the line with the worst estimate and, while lines agree, the middles of the widest gaps."""
    frequencies = _frequencies(lines)
    seen = [step.index for step in model.steps]
    if len(seen) < len(FIRST_LINES):
        wanted = frequencies[0] + FIRST_LINES[len(seen)] * (frequencies[-1] - frequencies[0])
        order = np.argsort(np.abs(frequencies - wanted), kind="stable")
        return int(next(i for i in order if i not in seen))
    passed = next((n for n, step in enumerate(reversed(model.steps)) if not step.check.agrees(tolerance)), len(seen))
    if passed in (0, PASSES - 1):
        scanned = _unseen(len(frequencies), seen)
        return int(scanned[np.argmax(survey(model, [lines[i] for i in scanned])[1])])
    edges = np.sort(np.array([-1, *seen, len(frequencies)]))
    gap = int(np.argmax(np.diff(edges)))
    middle = (edges[gap] + edges[gap + 1]) // 2
    return int(np.clip(middle, 0, len(frequencies) - 1))


def _unseen(lines: int, seen: list[int]) -> Ints:
    """About `SCANNED_LINES` lines that were not factorised yet."""
    every = np.setdiff1d(np.arange(lines), seen)
    return every[np.unique(np.linspace(0, len(every) - 1, min(SCANNED_LINES, len(every))).round().astype(np.int64))]


def _new_columns(full: Engine, model: Reduction, line: Line, factor: Factor, frequencies: Floats) -> Floats:
    """Exact solutions at the line and their Krylov vectors, real, orthonormal and orthogonal to the basis.

    The fields of single loads, which their radiated power needs, enter without followers: these cost more than they save.
    """
    free = full.free
    fields = np.hstack([response.field for response in line.responses]) if line.responses else line.adjoints[:, :0]
    alone = [response.alone[free] for response in line.responses if response.alone.size]
    adjoints = line.adjoints
    start = _start(adjoints, model.samples)
    slope = full.inner(full.system.matrix(_slope(full.system, line.frequency, frequencies)))
    blocks = [adjoints[free], fields[free], *alone]
    if full.system.symmetric:
        blocks.append(_krylov(factor.solve, slope, np.hstack([start, fields])[free]))
    else:
        blocks.append(_krylov(factor.solve_transpose, slope.T.tocsr(), start[free]))
        blocks.append(_krylov(factor.solve, slope, fields[free]))
    columns = np.zeros((full.system.size, 2 * sum(block.shape[1] for block in blocks)))
    columns[free] = np.hstack([part for block in blocks for part in (block.real, block.imag)])
    return orthonormal(model.basis[:, ~model.projected.fixed], columns)


def _start(adjoints: Complex, samples: Samples) -> Complex:
    """One adjoint per receiver: the mean over its samples. The samples' own enter the basis without followers."""
    receivers = np.unique(samples.receiver)
    weights = np.where(samples.receiver[:, None] == receivers, samples.weight[:, None], 0.0)
    return np.asarray(adjoints @ weights)


def _slope(system: System, f: float, frequencies: Floats) -> Complex:
    """d phi_j / d(w^2) by a central difference of a step that stays inside the band, where the laws are defined."""
    low, high = float(frequencies[0]), float(frequencies[-1])
    step = max(0.02 * (high - low), 1e-6 * f)
    a, b = max(low, f - step), min(high, f + step)
    phi = system.coefficients(np.array([a, b]))
    return np.asarray((phi[1] - phi[0]) / ((2 * np.pi) ** 2 * (b**2 - a**2)))


def _krylov(solve: Callable[[Complex], Complex], slope: Any, start: Complex) -> Complex:
    """Orthonormal followers of `start` under A^-1 A': block Arnoldi, orthogonalised twice (once loses rank)."""
    block = scipy.linalg.qr(start, mode="economic")[0]
    blocks = [block]
    moments = int(np.clip(KRYLOV_COLUMNS // max(block.shape[1], 1), FEWEST_MOMENTS, MOST_MOMENTS))
    for _ in range(moments):
        following = solve(np.ascontiguousarray(slope @ blocks[-1]))
        for _ in range(2):
            for earlier in blocks:
                following = following - earlier @ (earlier.conj().T @ following)
        block, triangle, _ = scipy.linalg.qr(following, mode="economic", pivoting=True)
        size = np.abs(np.diag(triangle))
        block = block[:, size > 1e-10 * size.max(initial=0.0)]
        if not block.shape[1]:
            break
        blocks.append(block)
    return np.asarray(np.hstack(blocks)[:, blocks[0].shape[1] :], dtype=np.complex128)


def orthonormal(basis: Floats, columns: Floats, keep_above: float = KEEP_ABOVE) -> Floats:
    """Orthonormal columns that, with `basis` (orthonormal), span what `columns` span, but for parts below `keep_above`."""
    size = np.linalg.norm(columns, axis=0)
    rest = columns / np.where(size > 0, size, 1.0)
    for _ in range(2):
        rest = rest - basis @ (basis.T @ rest)
    q, triangle, _ = scipy.linalg.qr(rest, mode="economic", pivoting=True, overwrite_a=True)
    kept = q[:, np.abs(np.diag(triangle)) > keep_above]
    return np.asarray(scipy.linalg.qr(kept - basis @ (basis.T @ kept), mode="economic")[0])


# ---------------------------------------------------------------------------------------------------------------------
# judging


def _check(model: Reduction, values: Values, exact: Line) -> Check:
    if not model.size:
        return Check(exact.frequency, np.inf, np.inf, np.inf, True)
    line, estimate = _estimated(model, model.engine(), values)
    pairs = list(zip(line.responses, exact.responses, strict=True))
    field = max((_field_deviation(model, a.field, b.field) for a, b in pairs), default=0.0)
    heard = [
        deviation(model.samples, a.contributions, b.contributions, mix) for (a, b), mix in zip(pairs, values.mix, strict=True)
    ]
    level = max(heard, default=0.0) if len(model.samples.receiver) else field
    level = max([level, *(power_deviation(a.radiated, b.radiated) for a, b in pairs)])
    return Check(exact.frequency, level, field, estimate, False)


def deviation(samples: Samples, found: Complex, exact: Complex, mix: Complex) -> float:
    """Largest difference [dB] of a receiver's level, and of a contribution against the largest one at its sample.

    found, exact (samples, loads); mix (loads, r).
    """
    parts = np.abs(found - exact).max(axis=1) / np.maximum(np.abs(exact).max(axis=1), 1e-300)
    levels = [_mean_square(samples, p @ mix) for p in (found, exact)]
    change = np.abs(10 * np.log10(np.maximum(levels[0], 1e-300) / np.maximum(levels[1], 1e-300)))
    return float(max(np.max(DB * np.log1p(parts), initial=0.0), np.max(change, initial=0.0)))


def power_deviation(found: Complex, exact: Complex) -> float:
    """Largest difference [dB] of forms (surfaces, loads, loads) of radiated power, against the largest entry of a surface."""
    if not exact.size:
        return 0.0
    largest = np.maximum(np.abs(exact).max(axis=(1, 2)), 1e-300)
    return float(np.max(0.5 * DB * np.log1p(np.abs(found - exact).max(axis=(1, 2)) / largest)))


def _mean_square(samples: Samples, pressure: Complex) -> Floats:
    """Weighted over the samples of each receiver, (receivers,)."""
    square = samples.weight * (np.abs(pressure) ** 2).sum(axis=1)
    return np.asarray(np.bincount(samples.receiver, weights=square), dtype=np.float64)


def _field_deviation(model: Reduction, coordinates: Complex, exact: Complex) -> float:
    vertices = model.system.space.topology.n_vertices
    miss = np.linalg.norm(model.basis[:vertices] @ coordinates - exact[:vertices])
    return float(DB * np.log1p(miss / max(float(np.linalg.norm(exact[:vertices])), 1e-300)))


def survey(model: Reduction, lines: list[Values]) -> tuple[list[Line], Floats]:
    """Lines from the model, and their estimated deviations [dB], scaled by the worst ratio seen at the checks."""
    engine = model.engine()
    pairs = [_estimated(model, engine, values) for values in lines]
    found = [replace(line, residual=float("nan")) for line, _ in pairs]
    return found, np.array([raw for _, raw in pairs]) * _scale(model)


def _scale(model: Reduction) -> float:
    """Worst ratio of true deviation to raw estimate at the checked lines; 1 while there is none."""
    known = [s.check for s in model.steps if np.isfinite(s.check.estimate)]
    return max([1.0, *(c.deviation / max(c.estimate, SMALLEST_ESTIMATE) for c in known)])


def _estimated(model: Reduction, engine: Engine, values: Values) -> tuple[Line, float]:
    """A line from the model's `engine`, and its raw estimate [dB]: the largest over load cases and receiver samples."""
    line, factor = engine.solved(values)
    matrix = engine.system.matrix(values.phi)
    adjoint = model.sketch.adjoint_residual(values, line.adjoints)
    out = [0.0]
    for number, response in enumerate(line.responses):
        alone = response.alone if response.alone.size else _fields_alone(engine, factor, matrix, values, number)
        residuals = model.sketch.forward_residuals(number, values, alone)
        out.append(_raw_estimate(model, values, response, adjoint, residuals, values.mix[number]))
    return line, max(out)


def _fields_alone(engine: Engine, factor: Factor, matrix: Any, values: Values, number: int) -> Complex:
    """The field of every load of load case `number` by itself, (K, loads)."""
    drive = Drive.of(engine.system.load_sets[number], matrix, values.psi[number], values.mix[number])
    fields = np.array(drive.given, dtype=np.complex128)
    fields[engine.free] += factor.solve(drive.inside[engine.free])
    return fields


def _raw_estimate(
    model: Reduction, values: Values, response: Response, adjoint: Floats, residuals: Complex, mix: Complex
) -> float:
    """|r_z| |r| / |p| [dB]: an output misses r_z^T A^-1 r, with r of the load case for its level, and with r of each load
    for its contribution. Both are needed: where loads cancel, their sum is found long before its parts are."""
    together = float(np.linalg.norm(residuals @ mix))
    if not len(model.samples.receiver):
        return float(DB * np.log1p(together / max(float(np.linalg.norm(response.field)), 1e-300)))
    heard = np.sqrt(_mean_square(model.samples, values.heard(model.projected.receivers @ response.field)))
    level = adjoint * together / np.maximum(heard[model.samples.receiver], 1e-300)
    apart = np.linalg.norm(residuals, axis=0).max(initial=0.0)
    contribution = adjoint * apart / np.maximum(np.abs(response.contributions).max(axis=1, initial=0.0), 1e-300)
    return float(DB * np.log1p(np.maximum(level, contribution).max()))
