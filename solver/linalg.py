"""Sparse direct solvers behind one small protocol.

    A x = b,  A complex symmetric (A = A^T, not Hermitian), one pattern for a whole sweep

`analyse` looks at the pattern once; `Analysis.factor` turns values into a `Factor`; nothing is carried from one frequency
to the next. The default is the LDL^T of `rslab`; SuperLU (SciPy) with a METIS ordering always works and takes over, with
a warning, where the default fails.
"""

from __future__ import annotations

import os
import warnings
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
import scipy.sparse.linalg as spla

from murmesh.solver.errors import FallbackWarning, SolveError

Complex = npt.NDArray[np.complex128]
CHUNK = 32
"""Right-hand sides solved at once; larger blocks no longer gain."""
GOOD_RESIDUAL = 1e-10
REFINE_ABOVE = 1e-12
"""Relative residual above which a solution is refined; factorisations usually stay well below."""


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

    def factor(self, lower: Complex) -> Factor:
        """Factorise the values (nnz,) of the lower triangle, in the order of the analysed pattern."""


def analyse(lower: sp.csc_matrix, solver: str = "default", threads: int | None = None, *, symmetric: bool = True) -> Analysis:
    """Analyse the pattern of the lower triangle (n, n, CSC, sorted indices) of a symmetric matrix, or of a whole one.

    `solver` is "default", "rslab" or "superlu"; `threads` defaults to the environment variable MURMESH_THREADS, or to the
    cores, at most four.
    """
    threads = threads or int(os.environ.get("MURMESH_THREADS", "0")) or min(os.cpu_count() or 1, 4)
    if not symmetric:
        return General(lower)
    if solver == "superlu":
        return SuperLU.analyse(lower)
    if solver not in ("default", "rslab"):
        raise SolveError(f"no sparse solver is called '{solver}'; choose default, rslab or superlu")
    try:
        return Rslab.analyse(lower, threads)
    except ImportError:
        if solver == "rslab":
            raise SolveError("the package 'rslab' is not installed; install it or choose the solver 'superlu'") from None
        return SuperLU.analyse(lower)


@dataclass(frozen=True)
class Rslab:
    """Supernodal LDL^T of complex symmetric matrices; falls back to SuperLU on a singular pivot."""

    pattern: sp.csc_matrix
    symbolic: Any
    name: str = "rslab LDL^T"

    @classmethod
    def analyse(cls, lower: sp.csc_matrix, threads: int) -> Rslab:
        import rslab

        return cls(lower, rslab.analyze(lower, path="ldlt", ordering="metis", threads=threads))

    def factor(self, lower: Complex) -> Factor:
        try:
            return RslabFactor(self.symbolic.factor(lower))
        except RuntimeError as error:
            warnings.warn(f"LDL^T failed ({error}); this line is solved with SuperLU", FallbackWarning, stacklevel=2)
            return SuperLU.analyse(self.pattern).factor(lower)


@dataclass(frozen=True)
class RslabFactor:
    handle: Any

    def solve(self, b: Complex) -> Complex:
        blocks = [np.ascontiguousarray(b[:, i : i + CHUNK]) for i in range(0, b.shape[1], CHUNK)]
        return np.hstack([self.handle.solve_many(block) for block in blocks]) if blocks else b

    def solve_transpose(self, b: Complex) -> Complex:
        return self.solve(b)


@dataclass(frozen=True)
class SuperLU:
    """SciPy's SuperLU in symmetric mode with a METIS pre-permutation."""

    pattern: sp.csc_matrix
    order: npt.NDArray[np.int64]
    name: str = "SuperLU"

    @classmethod
    def analyse(cls, lower: sp.csc_matrix) -> SuperLU:
        return cls(lower, _metis_order(lower))

    def factor(self, lower: Complex) -> Factor:
        part = sp.csc_matrix((lower, self.pattern.indices, self.pattern.indptr), shape=self.pattern.shape)
        full = (part + sp.tril(part, -1).T).tocsc()
        permuted = full[self.order][:, self.order].tocsc()
        try:
            handle = spla.splu(permuted, permc_spec="NATURAL", diag_pivot_thresh=0.01, options={"SymmetricMode": True})
        except RuntimeError as error:
            raise SolveError(
                f"the system of {len(self.order)} unknowns is singular ({error}); a rigid cavity without damping at one "
                "of its modes? State the damping of the region"
            ) from None
        return SuperLUFactor(handle, self.order)


@dataclass(frozen=True)
class SuperLUFactor:
    handle: Any
    order: npt.NDArray[np.int64]

    def _solve(self, b: Complex, trans: str) -> Complex:
        x = np.empty_like(b, dtype=np.complex128)
        x[self.order] = self.handle.solve(np.ascontiguousarray(b[self.order], dtype=np.complex128), trans)
        return x

    def solve(self, b: Complex) -> Complex:
        return self._solve(b, "N")

    def solve_transpose(self, b: Complex) -> Complex:
        return self._solve(b, "T")


@dataclass(frozen=True)
class General:
    """SuperLU of unsymmetric matrices."""

    pattern: sp.csc_matrix
    name: str = "SuperLU"

    def factor(self, lower: Complex) -> Factor:
        matrix = sp.csc_matrix((lower, self.pattern.indices, self.pattern.indptr), shape=self.pattern.shape)
        return SuperLUFactor(spla.splu(matrix), np.arange(matrix.shape[0]))


def _metis_order(lower: sp.csc_matrix) -> npt.NDArray[np.int64]:
    """Nested dissection; SciPy's reverse Cuthill-McKee where METIS is not installed."""
    graph = sp.tril(lower, -1)
    graph = (graph + graph.T).tocsr()
    try:
        import pymetis

        order, _ = pymetis.nested_dissection(pymetis.CSRAdjacency(graph.indptr, graph.indices))
        return np.asarray(order, dtype=np.int64)
    except ImportError:
        return np.asarray(sp.csgraph.reverse_cuthill_mckee(graph, symmetric_mode=True), dtype=np.int64)


def solve_refined(factor: Factor, matrix: Any, b: Complex, *, transpose: bool = False) -> tuple[Complex, float]:
    """x with A x = b (or A^T x = b) and the worst relative residual |b - A x| / |b| over the columns.

    Refined once where needed.
    Raises SolveError if the residual stays above `GOOD_RESIDUAL`.
    """
    solve = factor.solve_transpose if transpose else factor.solve
    matrix = matrix.T if transpose else matrix
    x = solve(b)
    residual = b - matrix @ x
    worst = _worst(residual, b)
    if worst > REFINE_ABOVE:
        x = x + solve(residual)
        worst = _worst(b - matrix @ x, b)
    if not worst < GOOD_RESIDUAL:
        raise SolveError(
            f"the linear system is solved to a residual of {worst:.1e} only (wanted {GOOD_RESIDUAL:.0e}); "
            "is a region without damping driven exactly at a mode? State its damping, or shift the line a little"
        )
    return x, worst


def _worst(residual: Complex, b: Complex) -> float:
    norms = np.linalg.norm(b, axis=0)
    return float(np.max(np.linalg.norm(residual, axis=0) / np.where(norms > 0, norms, 1.0), initial=0.0))
