"""The sparse solvers on a Helmholtz matrix of a box, against each other and against the machine's matrix product."""

from __future__ import annotations

import time
import warnings
from collections.abc import Iterator
from functools import cache

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from bench import Row, benchmark, best_of, lower, peaked, timed
from meshes import box
from murmesh.solver.dofs import DofMap
from murmesh.solver.elements.geometry import Geometry
from murmesh.solver.linalg import CHUNK, Backed, Rslab, analyse, solve_refined
from murmesh.solver.topology import Topology
from murmesh.solver.volumes import volume_matrices


@cache
def helmholtz(cells: int, order: int, k: float = 8.0) -> sp.csr_matrix:
    """K - k^2 (1 - 0.03 i) M of the unit box."""
    mesh = box(cells, cells, cells)
    stiffness, mass = volume_matrices(Geometry(mesh.nodes, mesh.tets), DofMap.build(Topology.build(mesh.tets), order))
    return (stiffness - k**2 * (1 - 0.03j) * mass).tocsr()


def product_rate(n: int = 1500) -> float:
    """GFLOP/s of a complex matrix product, 8 n^3 operations."""
    a = np.random.default_rng(0).normal(size=(n, n)) + 0j
    return 8e-9 * n**3 / best_of(4, lambda: a @ a)


def _right(n: int, count: int) -> npt.NDArray[np.complex128]:
    return np.random.default_rng(1).normal(size=(n, count)) + 0j


@benchmark("solver")
def solver(quick: bool) -> Iterator[Row]:
    matrix = helmholtz(8 if quick else 11, 4)
    pattern = lower(matrix)
    n = matrix.shape[0]
    analysis, seconds = timed(lambda: analyse(pattern))
    assert isinstance(analysis, Rslab)
    yield Row(f"analysis, p=4, n={n}", seconds, "s")
    analysis.factor(pattern.data)  # the first factorisation in a process is slower
    factor, peak = peaked(lambda: analysis.factor(pattern.data))
    assert isinstance(factor, Backed)
    double = best_of(3, lambda: analysis.factor(pattern.data))
    planned = analysis.memory(np.complex128) / 2**20
    flops = analysis.symbolic.estimate_memory("complex128")["factor_flops"]
    yield from _rates(flops, double, n)
    yield Row("memory estimate / measured peak", planned / peak, "", f"{planned:.0f} and {peak:.0f} MiB")
    yield from _solves(factor, matrix)
    yield from _single(pattern, matrix, double)
    yield from _superlu(pattern, double)


def _rates(flops: float, seconds: float, n: int) -> Iterator[Row]:
    peak = product_rate()
    rate = flops * 1e-9 / seconds
    yield Row(f"factorisation LDL^T, n={n}", seconds, "s")
    yield Row("factorisation rate", rate, "GFLOP/s", "operations as counted by the solver's analysis")
    yield Row("factorisation rate / matrix product", rate / peak, "", f"zgemm, 1500 x 1500, all threads: {peak:.0f} GFLOP/s")


def _solves(factor: Backed, matrix: sp.csr_matrix) -> Iterator[Row]:
    one, block = (_right(matrix.shape[0], count) for count in (1, CHUNK))
    alone = best_of(3, lambda: factor.solve(one))
    each = best_of(3, lambda: factor.solve(block)) / CHUNK
    yield Row(f"solve, per right-hand side in blocks of {CHUNK}", 1e3 * each, "ms", f"one alone: {1e3 * alone:.0f} ms")
    (_, residual), seconds = timed(lambda: solve_refined(factor, matrix, block))
    yield Row("the same, residual checked and refined", 1e3 * seconds / CHUNK, "ms", f"residual {residual:.0e}")


def _single(pattern: sp.csc_matrix, matrix: sp.csr_matrix, double: float) -> Iterator[Row]:
    analysis = analyse(pattern, "single")
    factor, peak = peaked(lambda: analysis.factor(pattern.data))
    seconds = best_of(3, lambda: analysis.factor(pattern.data))
    b = _right(matrix.shape[0], CHUNK)
    (_, residual), refined = timed(lambda: solve_refined(factor, matrix, b))
    yield Row("single precision: factorisation time", seconds / double, "", f"double precision: {double:.2f} s")
    yield Row("single precision: peak memory", peak, "MiB")
    yield Row("single precision: residual after refinement", residual, "", "", 1e-10)
    yield Row("single precision: refined solve", 1e3 * refined / CHUNK, "ms", f"per right-hand side in blocks of {CHUNK}")


def _superlu(pattern: sp.csc_matrix, double: float) -> Iterator[Row]:
    analysis = analyse(pattern, "superlu")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        _, seconds = timed(lambda: analysis.factor(pattern.data), time.perf_counter)
    yield Row("SuperLU with METIS: factorisation time", seconds / double, "", f"LDL^T: {double:.2f} s")
