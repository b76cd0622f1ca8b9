"""Every way of solving, on small matrices whose solution is known: symmetric, unsymmetric, singular, with constraints."""

from __future__ import annotations

import itertools
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest
import scipy.sparse as sp

from murmesh.solver import linalg, memory
from murmesh.solver.errors import FallbackWarning, SolveError
from murmesh.solver.linalg import GOOD_RESIDUAL, SOLVERS, Backed, Rslab, RslabFactor, SuperLU, analyse, solve_refined

Complex = npt.NDArray[np.complex128]
COLUMNS = 37  # more than one block, the last one not full


def _grid(n: int, k: float = 1.3) -> sp.csc_matrix:
    """A Helmholtz matrix on a cubic grid of n^3 points, complex symmetric, with some loss."""
    line = sp.diags_array([-np.ones(n - 1), 2.0 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1])
    one = sp.eye_array(n)
    laplace = sum(sp.kron(sp.kron(*pair[:2]), pair[2]) for pair in ((line, one, one), (one, line, one), (one, one, line)))
    return _sorted(laplace - k * (1 - 0.05j) * sp.eye_array(n**3))


def _sorted(matrix: sp.csc_matrix) -> sp.csc_matrix:
    out = sp.csc_matrix(matrix.astype(np.complex128))
    out.sort_indices()
    return out


def _unsymmetric(n: int) -> sp.csc_matrix:
    """The same with a convective term that makes A different from A^T."""
    drift = sp.diags_array([0.4 * np.ones(n**3 - 1), -0.7j * np.ones(n**3 - 1)], offsets=[1, -1])
    return _sorted(_grid(n) + drift)


def _saddle(n: int, constraints: int = 20) -> sp.csc_matrix:
    """Rows of Lagrange multipliers: zeros on the diagonal."""
    A = _grid(n)
    at = np.arange(constraints)
    rows = sp.csc_matrix((1.0 + 0.1 * at, (at, 3 * at)), shape=(constraints, n**3))
    return _sorted(sp.block_array([[A, rows.T], [rows, None]]))


def _multipliers_alone(n: int) -> sp.csc_matrix:
    """[[0, C], [C^T, 0]], C regular: no entry on the diagonal of the unknowns that are eliminated first."""
    C = _unsymmetric(n)
    return _sorted(sp.block_array([[None, C], [C.T, None]]))


def _right(matrix: sp.csc_matrix) -> tuple[Complex, Complex]:
    """x and A x; x in columns that are not contiguous."""
    rng = np.random.default_rng(1)
    x = (rng.normal(size=(COLUMNS, matrix.shape[0])) + 1j * rng.normal(size=(COLUMNS, matrix.shape[0]))).T
    return x, matrix @ x


def _pattern(matrix: sp.csc_matrix, symmetric: bool) -> sp.csc_matrix:
    return _sorted(sp.tril(matrix)) if symmetric else matrix


@pytest.mark.parametrize("solver", SOLVERS)
@pytest.mark.parametrize(("make", "symmetric"), [(_grid, True), (_unsymmetric, False), (_grid, False)])
def test_every_solver_solves_forward_and_transposed(solver: str, make: type, symmetric: bool) -> None:
    matrix = make(7)
    pattern = _pattern(matrix, symmetric)
    factor = analyse(pattern, solver, 1, symmetric=symmetric).factor(pattern.data)
    x, b = _right(matrix)
    for transpose, right in ((False, b), (True, matrix.T @ x)):
        found, residual = solve_refined(factor, matrix, right, transpose=transpose)
        assert residual < GOOD_RESIDUAL
        assert np.allclose(found, x, rtol=0, atol=1e-8)
        alone = factor.solve_transpose(right) if transpose else factor.solve(right)
        assert np.allclose(alone, x, rtol=0, atol=1e-8)


def test_the_transposed_solution_is_another_one() -> None:
    matrix = _unsymmetric(5)
    factor = analyse(matrix, threads=1, symmetric=False).factor(matrix.data)
    b = np.ones((matrix.shape[0], 1), dtype=complex)
    assert np.abs(factor.solve(b) - factor.solve_transpose(b)).max() > 0.01


@pytest.mark.parametrize("solver", SOLVERS)
def test_one_analysis_serves_many_values(solver: str) -> None:
    matrix = _grid(5)
    lower = _pattern(matrix, True)
    analysis = analyse(lower, solver, 1)
    x, b = _right(matrix)
    for scale in (1.0, 2.0 - 1.0j):
        assert np.allclose(analysis.factor(scale * lower.data).solve(scale * b), x, atol=1e-8)
    assert analysis.factor(lower.data).solve(b[:, :0]).shape == (matrix.shape[0], 0)


def test_single_precision_is_rough_and_refined() -> None:
    matrix = _grid(8)
    lower = _pattern(matrix, True)
    analysis = analyse(lower, "single", 1)
    assert analysis.name == "rslab LDL^T, single precision"
    factor = analysis.factor(lower.data)
    assert isinstance(factor, Backed)
    _, b = _right(matrix)

    def residual(x: Complex) -> float:
        return float(np.linalg.norm(b - matrix @ x) / np.linalg.norm(b))

    assert 1e-8 < residual(factor.own.solve(b)) < 1e-3
    assert residual(factor.solve(b)) < 1e-11


def test_what_single_precision_cannot_refine_is_factorised_in_double() -> None:
    line = np.logspace(0, 9, 60)  # the condition number is beyond single precision
    rotation = np.linalg.qr(np.random.default_rng(2).normal(size=(60, 60)))[0]
    matrix = _sorted(sp.csc_matrix(rotation @ np.diag(line) @ rotation.T))
    matrix = _sorted((matrix + matrix.T) / 2)
    lower = _pattern(matrix, True)
    b = np.linalg.solve(rotation, np.ones((60, 1))).astype(complex)
    factor = analyse(lower, "single", 1).factor(lower.data)
    with pytest.warns(FallbackWarning, match=r"single precision solves to a residual of .* only .* taken: LDL\^T$"):
        _, residual = solve_refined(factor, matrix, matrix @ b)
    assert residual < GOOD_RESIDUAL


def _failing(count: int, monkeypatch: pytest.MonkeyPatch) -> list[dict[str, float]]:
    """The first `count` factorisations by rslab fail."""
    calls: list[dict[str, float]] = []
    numeric = Rslab._numeric

    def fail(self: Rslab, values: Complex, dtype: type, **settings: float) -> object:
        calls.append(settings)
        if len(calls) <= count:
            raise RuntimeError("zero pivot")
        return numeric(self, values, dtype, **settings)

    monkeypatch.setattr(Rslab, "_numeric", fail)
    return calls


WAYS = ["LDL^T", "LDL^T with pivots lifted to 1e-08", "LU", "SuperLU"]


@pytest.mark.parametrize("failures", [1, 2, 3])
def test_a_failed_factorisation_passes_down_the_chain(failures: int, monkeypatch: pytest.MonkeyPatch) -> None:
    calls = _failing(failures, monkeypatch)
    matrix = _grid(6)
    lower = _pattern(matrix, True)
    with pytest.warns(FallbackWarning) as said:
        factor = analyse(lower, threads=1).factor(lower.data)
    expected = [f"{a} failed (zero pivot); the next way is taken: {b}" for a, b in itertools.pairwise(WAYS)]
    assert [str(w.message) for w in said] == expected[:failures]
    assert isinstance(factor, Backed) and factor.step.name == WAYS[failures]
    assert ("preconditioner" in calls[-1]) == (failures == 1)
    x, b = _right(matrix)
    assert np.allclose(factor.solve(b), x, atol=1e-8)
    assert np.allclose(factor.solve_transpose(matrix.T @ x), x, atol=1e-8)


@pytest.mark.parametrize("solver", ["default", "single"])
@pytest.mark.parametrize("matrix", [_saddle(7), _multipliers_alone(4)], ids=["constraints", "constraints alone"])
def test_zeros_on_the_diagonal_are_survived(matrix: sp.csc_matrix, solver: str) -> None:
    """Matrices that L D L^T finds rank-deficient though they are regular."""
    lower = _pattern(matrix, True)
    x, b = _right(matrix)
    with pytest.warns(FallbackWarning, match="failed|solves to a residual") as said:
        found, residual = solve_refined(analyse(lower, solver, 1).factor(lower.data), matrix, b)
    assert any("LDL^T failed (matrix is numerically rank-deficient)" in str(w.message) for w in said) or solver == "single"
    assert residual < GOOD_RESIDUAL
    assert np.allclose(found, x, atol=1e-7)


@pytest.mark.parametrize("symmetric", [True, False])
def test_a_singular_matrix_is_an_error_in_the_end(symmetric: bool) -> None:
    matrix = _grid(3)
    matrix.data[(matrix.indices == 4) | (np.repeat(np.arange(27), np.diff(matrix.indptr)) == 4)] = 0.0
    pattern = _pattern(matrix, symmetric)
    with pytest.warns(FallbackWarning, match="the next way is taken"), pytest.raises(SolveError, match="is singular"):
        factor = analyse(pattern, threads=1, symmetric=symmetric).factor(pattern.data)
        solve_refined(factor, matrix, np.ones((27, 1), dtype=complex))


def test_a_solution_that_stays_inaccurate_is_made_in_another_way(monkeypatch: pytest.MonkeyPatch) -> None:
    matrix = _grid(5)
    lower = _pattern(matrix, True)
    factor = analyse(lower, threads=1).factor(lower.data)
    monkeypatch.setattr(RslabFactor, "solve", lambda self, b: 0.1j * b)
    x, b = _right(matrix)
    with pytest.warns(FallbackWarning, match=r"solves to a residual of .* only") as said:
        found, _ = solve_refined(factor, matrix, b)
    assert [str(w.message).split(": ")[-1] for w in said] == WAYS[1:]
    assert np.allclose(found, x, atol=1e-8)


def test_without_another_way_the_residual_is_an_error() -> None:
    class Wrong:
        def solve(self, b: Complex) -> Complex:
            return 0.1j * b

        solve_transpose = solve

    matrix = _grid(4)
    with pytest.raises(SolveError, match=r"residual of .* only .*driven exactly at a mode"):
        solve_refined(Wrong(), matrix, _right(matrix)[1])


def test_without_rslab_superlu_takes_over(monkeypatch: pytest.MonkeyPatch) -> None:
    def missing(*_: object, **__: object) -> None:
        raise ImportError("rslab")

    monkeypatch.setattr(Rslab, "analyse", missing)
    lower = _pattern(_grid(3), True)
    assert isinstance(analyse(lower), SuperLU)
    with pytest.raises(SolveError, match="'rslab' is not installed, and the solver 'single' needs it"):
        analyse(lower, "single")


# --- memory


def test_the_estimate_is_refused_before_factorising(monkeypatch: pytest.MonkeyPatch) -> None:
    matrix = _grid(12)
    lower = _pattern(matrix, True)
    analysis = analyse(lower, threads=1)
    assert isinstance(analysis, Rslab)
    double, single = (analysis.memory(dtype) / memory.GIB for dtype in (np.complex128, np.complex64))
    assert single < 0.75 * double
    monkeypatch.setattr(Rslab, "symbolic", None, raising=False)
    monkeypatch.setenv("MURMESH_MEMORY", f"{0.5 * (single + double):.6f}")
    with pytest.raises(
        SolveError, match=r"factorising 1728 unknowns needs .* GiB, but .* available.*'single'.*, which fits\. About "
    ):
        analysis.factor(lower.data)
    assert analyse(lower, "single", 1).factor(lower.data) is not None
    monkeypatch.setenv("MURMESH_MEMORY", f"{0.5 * single:.6f}")
    with pytest.raises(SolveError, match=r"which does not fit either\. About \d+ unknowns would fit: ask for less accuracy"):
        analysis.factor(lower.data)
    with pytest.raises(SolveError, match=r"needs .* are available\. About"):
        analyse(lower, "single", 1).factor(lower.data)


def test_superlu_is_refused_by_the_law(monkeypatch: pytest.MonkeyPatch) -> None:
    lower = _pattern(_grid(12), True)
    needed = linalg.SUPERLU_BYTES * 1728 ** (4 / 3)
    monkeypatch.setenv("MURMESH_MEMORY", str(needed / 16 / memory.GIB))
    with pytest.raises(SolveError, match="About 220 unknowns would fit"):  # 1728 / 16^(3/4) = 216
        analyse(lower, "superlu").factor(lower.data)


def test_what_is_available(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.delenv("MURMESH_MEMORY", raising=False)
    assert memory.available_memory() > 0
    (tmp_path / "meminfo").write_text("MemTotal:  8000 kB\nMemAvailable:    3000 kB\n")
    monkeypatch.setattr(memory, "_MEMINFO", tmp_path / "meminfo")
    monkeypatch.setattr(memory, "_CGROUPS", ((tmp_path, "most", "used"),))
    assert memory.available_memory() == 3000 * 1024
    (tmp_path / "most").write_text("2000000\n")
    (tmp_path / "used").write_text("1500000\n")
    (tmp_path / "memory.stat").write_text("anon 5\ninactive_file 100000\n")
    assert memory.available_memory() == 600000
    (tmp_path / "most").write_text("max\n")
    assert memory.available_memory() == 3000 * 1024


@pytest.mark.parametrize("text", ["lots", "-1", "0", "nan"])
def test_a_senseless_limit_is_an_error(text: str, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("MURMESH_MEMORY", text)
    with pytest.raises(SolveError, match="expected a positive number of GiB"):
        memory.available_memory()
