"""Sparse direct solvers behind one small protocol.

    A x = b,  one pattern for a whole sweep; A complex symmetric (A = A^T, not Hermitian) or not

`analyse` looks at the pattern once; `Analysis.factor` turns values into a `Factor`; nothing is carried from one frequency
to the next. The default is `rslab`: L D L^T of symmetric matrices, L U of others. What fails or stays inaccurate passes
down a chain, each step said with a `FallbackWarning`: pivots lifted to 1e-8 (symmetric matrices only), L U, and SuperLU
(SciPy) with a METIS ordering. The solver "single" factorises in single precision, half the memory and nearly twice as
fast, and refines every solution to double; where that stalls, double precision takes over.

Before factorising, the memory needed is compared with the memory there is (`murmesh.solver.memory`).
"""

from __future__ import annotations

import os
import warnings
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
import scipy.sparse.linalg as spla

from murmesh.solver.errors import FallbackWarning, SolveError
from murmesh.solver.memory import require_memory

Complex = npt.NDArray[np.complex128]
Ints = npt.NDArray[np.int64]
CHUNK = 32
"""Right-hand sides solved at once; larger blocks no longer gain."""
GOOD_RESIDUAL = 1e-10
REFINE_ABOVE = 1e-12
"""Relative residual above which a solution is refined; factorisations usually stay well below."""
LIFTED_PIVOT = 1e-8
"""What too small pivots are lifted to where L D L^T fails (rows of constraints have zeros on the diagonal)."""
TINY = np.finfo(np.float64).tiny
SUPERLU_BYTES = 400.0
"""What SuperLU needs for n unknowns is this times n^(4/3), with some room."""
SOLVERS = ("default", "rslab", "single", "superlu")


class Factor(Protocol):
    """A factorised matrix."""

    def solve(self, b: Complex) -> Complex:
        """x (n, r) with A x = b (n, r)."""

    def solve_transpose(self, b: Complex) -> Complex:
        """x (n, r) with A^T x = b (n, r)."""


class Analysis(Protocol):
    """The symbolic analysis of one pattern."""

    @property
    def name(self) -> str:
        """What the solver is called in a result's provenance."""

    def factor(self, values: Complex) -> Factor:
        """Factorise the values (nnz,) of the analysed pattern, in its order.

        Raises: SolveError if the factors would not fit in memory, or the matrix is singular.
        """


def analyse(
    pattern: sp.csc_matrix, solver: str = "default", threads: int | None = None, *, symmetric: bool = True
) -> Analysis:
    """Analyse a pattern (n, n, CSC, sorted indices): the lower triangle of a symmetric matrix, or a whole one.

    `solver` is one of `SOLVERS`; `threads` defaults to the environment variable MURMESH_THREADS, or to the cores, at most
    four.
    """
    if solver not in SOLVERS:
        raise SolveError(f"no sparse solver is called '{solver}'; choose default, rslab, single or superlu")
    if solver == "superlu":
        return SuperLU.analyse(pattern, symmetric=symmetric)
    threads = threads or int(os.environ.get("MURMESH_THREADS", "0")) or min(os.cpu_count() or 1, 4)
    try:
        return Rslab.analyse(pattern, threads, symmetric=symmetric, single=solver == "single")
    except ImportError:
        if solver != "default":
            raise SolveError(
                f"the package 'rslab' is not installed, and the solver '{solver}' needs it; install it, or choose 'superlu'"
            ) from None
        return SuperLU.analyse(pattern, symmetric=symmetric)


@dataclass(frozen=True)
class Rslab:
    """Supernodal L D L^T of complex symmetric matrices, or L U of others, in double or single precision."""

    pattern: sp.csc_matrix
    symbolic: Any
    symmetric: bool = True
    single: bool = False
    threads: int = 1

    @classmethod
    def analyse(cls, pattern: sp.csc_matrix, threads: int, *, symmetric: bool = True, single: bool = False) -> Rslab:
        import rslab

        path = "ldlt" if symmetric else "lu"
        return cls(pattern, rslab.analyze(pattern, path=path, ordering="metis", threads=threads), symmetric, single, threads)

    @property
    def name(self) -> str:
        return f"rslab {'LDL^T' if self.symmetric else 'LU'}{', single precision' if self.single else ''}"

    def memory(self, dtype: type) -> int:
        """Bytes that a factorisation in `dtype` and block solves need at their peak, predicted from the pattern."""
        return int(self.symbolic.memory_plan(dtype=np.dtype(dtype).name, nrhs=CHUNK)["peak_bytes"])

    def factor(self, values: Complex) -> Factor:
        return first_of(self._steps(values), lambda: _whole(self.pattern, values, self.symmetric))

    def _steps(self, values: Complex) -> tuple[Step, ...]:
        """What is tried, one after another."""
        name = "LDL^T" if self.symmetric else "LU"
        single = Step("single precision", lambda: self._numeric(values, np.complex64), rough=True)
        double = Step(name, lambda: self._numeric(values, np.complex128))
        lifted = Step(
            f"LDL^T with pivots lifted to {LIFTED_PIVOT:.0e}",
            lambda: self._numeric(values, np.complex128, preconditioner=LIFTED_PIVOT),
            rough=True,
        )
        lu = Step("LU", lambda: self._general(values))
        superlu = Step("SuperLU", lambda: SuperLU.analyse(self.pattern, symmetric=self.symmetric).factor(values))
        return (*([single] if self.single else []), double, *([lifted, lu] if self.symmetric else []), superlu)

    def _numeric(self, values: Complex, dtype: type, **settings: float) -> Factor:
        small, large = self.memory(np.complex64), self.memory(np.complex128)
        single = dtype == np.complex64
        require_memory(small if single else large, self.pattern.shape[0], None if single else small)
        handle = self.symbolic.factor(values.astype(dtype, copy=False), **settings)
        return RslabFactor(handle, np.dtype(dtype), self.symmetric)

    def _general(self, values: Complex) -> Factor:
        """L U of the whole of a symmetric matrix."""
        whole = _whole(self.pattern, values, self.symmetric)
        return Rslab.analyse(whole, self.threads, symmetric=False)._numeric(whole.data, np.complex128)


@dataclass(frozen=True)
class RslabFactor:
    """Factors in the given precision; right-hand sides and solutions are complex128."""

    handle: Any
    dtype: np.dtype[Any]
    symmetric: bool

    def solve(self, b: Complex) -> Complex:
        x = np.empty(b.shape, dtype=np.complex128)
        for start in range(0, b.shape[1], CHUNK):
            block = slice(start, start + CHUNK)
            x[:, block] = self.handle.solve_many(np.ascontiguousarray(b[:, block], dtype=self.dtype))
        return x

    def solve_transpose(self, b: Complex) -> Complex:
        if self.symmetric:
            return self.solve(b)
        x = np.empty(b.shape, dtype=np.complex128)
        for column in range(b.shape[1]):  # rslab solves with A^T one right-hand side at a time
            x[:, column] = self.handle.solve_transpose(np.ascontiguousarray(b[:, column], dtype=self.dtype))
        return x


@dataclass(frozen=True)
class SuperLU:
    """SciPy's SuperLU with a METIS pre-permutation, pivoting on the diagonal where that is good enough."""

    pattern: sp.csc_matrix
    order: Ints
    symmetric: bool = True
    name: str = "SuperLU"

    @classmethod
    def analyse(cls, pattern: sp.csc_matrix, *, symmetric: bool = True) -> SuperLU:
        return cls(pattern, _metis_order(pattern), symmetric)

    def memory(self) -> int:
        """Bytes, by the n^(4/3) law; its factor is measured (tests/benchmarks: orders 2 to 4 need about 310)."""
        return int(SUPERLU_BYTES * len(self.order) ** (4 / 3))

    def factor(self, values: Complex) -> Factor:
        require_memory(self.memory(), len(self.order), None)
        permuted = _whole(self.pattern, values, self.symmetric)[self.order][:, self.order].tocsc()
        threshold = 0.01 if self.symmetric else 0.1
        try:
            handle = spla.splu(
                permuted, permc_spec="NATURAL", diag_pivot_thresh=threshold, options={"SymmetricMode": self.symmetric}
            )
        except RuntimeError as error:
            raise SolveError(
                f"the system of {len(self.order)} unknowns is singular ({error}); a rigid cavity without damping at one "
                "of its modes? State the damping of the region"
            ) from None
        return SuperLUFactor(handle, self.order)


@dataclass(frozen=True)
class SuperLUFactor:
    handle: Any
    order: Ints

    def _solve(self, b: Complex, trans: str) -> Complex:
        x = np.empty_like(b, dtype=np.complex128)
        for start in range(0, b.shape[1], CHUNK):
            block = slice(start, start + CHUNK)
            part = np.ascontiguousarray(b[self.order, block], dtype=np.complex128)
            x[self.order, block] = self.handle.solve(part, trans)
        return x

    def solve(self, b: Complex) -> Complex:
        return self._solve(b, "N")

    def solve_transpose(self, b: Complex) -> Complex:
        return self._solve(b, "T")


def _whole(pattern: sp.csc_matrix, values: Complex, symmetric: bool) -> sp.csc_matrix:
    """The whole matrix, its indices sorted, from the values of its lower triangle or of all of it."""
    part = sp.csc_matrix((values, pattern.indices, pattern.indptr), shape=pattern.shape)
    whole = (part + sp.tril(part, -1).T).tocsc() if symmetric else part
    whole.sort_indices()
    return whole


def _metis_order(pattern: sp.csc_matrix) -> Ints:
    """Nested dissection of A + A^T; SciPy's reverse Cuthill-McKee where METIS is not installed."""
    ones = sp.csc_matrix((np.ones(len(pattern.indices)), pattern.indices, pattern.indptr), shape=pattern.shape)
    both = ones + ones.T
    graph = (sp.tril(both, -1) + sp.triu(both, 1)).tocsr()
    try:
        import pymetis

        order, _ = pymetis.nested_dissection(pymetis.CSRAdjacency(graph.indptr, graph.indices))
        return np.asarray(order, dtype=np.int64)
    except ImportError:
        return np.asarray(sp.csgraph.reverse_cuthill_mckee(graph, symmetric_mode=True), dtype=np.int64)


@dataclass(frozen=True)
class Step:
    """One way to factorise; the solutions of a rough one are refined whoever asks for them."""

    name: str
    make: Callable[[], Factor]
    rough: bool = False


def first_of(steps: tuple[Step, ...], matrix: Callable[[], sp.csc_matrix]) -> Factor:
    """The first step that factorises, with the following ones behind it."""
    step, *rest = steps
    try:
        return Backed(step.make(), step, tuple(rest), matrix)
    except RuntimeError as error:
        if not rest:
            raise SolveError(f"the linear system cannot be factorised: {error}") from None
        _warn(f"{step.name} failed ({error})", rest[0])
        return first_of(tuple(rest), matrix)


@dataclass(frozen=True)
class Backed:
    """A factor that others stand behind, and take over where its solutions stay inaccurate (`solve_refined`)."""

    own: Factor
    step: Step
    rest: tuple[Step, ...]
    matrix: Callable[[], sp.csc_matrix]

    @cached_property
    def whole(self) -> sp.csc_matrix:
        """A, for the refinement of rough solutions."""
        return self.matrix()

    @cached_property
    def spare(self) -> Factor:
        """The next step's factor, made once."""
        return first_of(self.rest, self.matrix)

    def solve(self, b: Complex) -> Complex:
        return solve_refined(self, self.whole, b)[0] if self.step.rough else self.own.solve(b)

    def solve_transpose(self, b: Complex) -> Complex:
        return solve_refined(self, self.whole, b, transpose=True)[0] if self.step.rough else self.own.solve_transpose(b)


def _warn(what: str, following: Step) -> None:
    warnings.warn(f"{what}; the next way is taken: {following.name}", FallbackWarning, stacklevel=3)


def solve_refined(factor: Factor, matrix: Any, b: Complex, *, transpose: bool = False) -> tuple[Complex, float]:
    """x with A x = b (or A^T x = b) and the worst relative residual |b - A x| / |b| over the columns.

    Refined while that helps; where the residual stays above `GOOD_RESIDUAL`, the next way of factorising takes over.
    Raises: SolveError if there is none, or none would help because the matrix itself is nearly singular.
    """
    own = factor.own if isinstance(factor, Backed) else factor
    x, worst = _refine(own.solve_transpose if transpose else own.solve, matrix.T if transpose else matrix, b)
    if worst < GOOD_RESIDUAL:
        return x, worst
    if isinstance(factor, Backed) and factor.rest and not _stable(matrix.T if transpose else matrix, x, b):
        _warn(f"{factor.step.name} solves to a residual of {worst:.1e} only (wanted {GOOD_RESIDUAL:.0e})", factor.rest[0])
        return solve_refined(factor.spare, matrix, b, transpose=transpose)
    raise SolveError(
        f"the linear system is solved to a residual of {worst:.1e} only (wanted {GOOD_RESIDUAL:.0e}); "
        "is a region without damping driven exactly at a mode? State its damping, or shift the line a little"
    )


def _refine(solve: Callable[[Complex], Complex], matrix: Any, b: Complex) -> tuple[Complex, float]:
    """x <- x + A^-1 (b - A x) until the residual is small, or no longer halved."""
    x = solve(b)
    residual = b - matrix @ x
    worst = _worst(residual, b)
    while worst > REFINE_ABOVE:
        nearer = x + solve(residual)
        residual = b - matrix @ nearer
        before, now = worst, _worst(residual, b)
        if now < before:
            x, worst = nearer, now
        if not now < before / 2:
            break
    return x, worst


def _stable(matrix: Any, x: Complex, b: Complex) -> bool:
    """Whether every column is as exact as rounding allows, |b - A x| ~ eps |A| |x|: no other factors would do better."""
    size = float(np.max(abs(matrix).sum(axis=1)))
    scale = size * np.linalg.norm(x, axis=0) + np.linalg.norm(b, axis=0)
    backward = np.linalg.norm(b - matrix @ x, axis=0) / (scale + TINY)
    return bool(np.all(backward < REFINE_ABOVE))


def _worst(residual: Complex, b: Complex) -> float:
    norms = np.linalg.norm(b, axis=0)
    return float(np.max(np.linalg.norm(residual, axis=0) / np.where(norms > 0, norms, 1.0), initial=0.0))
