"""The error bar: it is the true error on fields known in closed form, its cheap form follows it, and it mends the level."""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np
import pytest
from exact_box import ExactBox, random_box, random_planes

from murmesh.solver import sweep
from murmesh.solver.accuracy import UNCALIBRATED, kappa, next_order
from murmesh.solver.result import read_result, write_result
from murmesh.solver.space import discretise
from murmesh.solver.sweep import Progress, solve

CASES = 60
DB = 20 / np.log(10)


@cache
def _effectivity(seed: int) -> tuple[float, float]:
    """|eta| / |p - p_h|, root mean squares over twelve receivers, and the true error in dB."""
    rng = np.random.default_rng(seed)
    box = random_box(rng)
    order = int(rng.integers(2, 6))
    cells = {2: 4, 3: 3, 4: 2, 5: 2}[order]
    receivers = np.array(box.lengths) * (0.05 + 0.9 * rng.random((12, 3)))
    f = float(rng.uniform(120, 420))
    case = box.case(random_planes(rng, box.lengths, cells), np.array([f]), receivers, order=order)
    held = solve(case).load_cases[0]
    found, eta = held.contributions[0, :, 0], held.mesh_error[0, :, 0]
    miss = box.pressure(receivers, f) - found
    size = float(np.linalg.norm(miss))
    return float(np.linalg.norm(eta)) / size, DB * size / float(np.linalg.norm(found))


def test_the_bar_is_the_true_error_in_nine_of_ten_exact_cases() -> None:
    """The sum that is solved exactly is the finer one: eta / (p - p_h) = 1 - (error left) / (error)."""
    ratios, errors = np.array([_effectivity(seed) for seed in range(CASES)]).T
    good = np.count_nonzero((ratios > 0.8) & (ratios < 1.25))
    assert good >= 0.9 * CASES, f"{good} of {CASES}; ratios {np.round(np.sort(ratios), 2)}"
    assert errors.max() > 0.3 and errors.min() < 0.02  # the cases are neither all easy nor all hopeless


@cache
def _swept(**sweep: object) -> tuple[ExactBox, np.ndarray, object]:
    rng = np.random.default_rng(7)
    box = random_box(rng)
    receivers = np.array(box.lengths) * (0.05 + 0.9 * rng.random((8, 3)))
    lines = np.linspace(100.0, 400.0, 31)
    case = box.case(random_planes(rng, box.lengths, 3), lines, receivers, order=3, **sweep)
    return box, receivers, solve(case)


@pytest.mark.parametrize("method", ["direct", "reduced"])
def test_the_cheap_bar_follows_the_true_error_and_the_corrected_level_is_better(method: str) -> None:
    box, receivers, result = _swept(method=method)
    held = result.load_cases[0]  # type: ignore[attr-defined]
    found, eta = held.contributions[:, :, 0], held.mesh_error[:, :, 0]
    true = np.array([box.pressure(receivers, float(f)) for f in result.frequencies])  # type: ignore[attr-defined]
    miss, ratio = true - found, np.linalg.norm(eta, axis=1) / np.linalg.norm(true - found, axis=1)
    assert np.quantile(ratio, 0.1) > 0.6 and np.quantile(ratio, 0.9) < 1.6, np.round(ratio, 2)
    assert np.linalg.norm(miss - eta) < 0.5 * np.linalg.norm(miss)


def test_reduced_and_direct_sweeps_have_the_same_bar() -> None:
    bars = [_swept(method=method)[2].mesh_bar("r0") for method in ("direct", "reduced")]  # type: ignore[attr-defined]
    assert np.allclose(bars[0], bars[1], rtol=0.02, atol=1e-4)


def test_the_bar_survives_the_file(tmp_path: Path) -> None:
    result = _swept(method="reduced")[2]
    write_result(result, tmp_path / "result.h5")  # type: ignore[arg-type]
    again = read_result(tmp_path / "result.h5")
    bar, square = again.mesh_bar("r1"), again.corrected("r1")
    assert bar is not None and square is not None and np.all(bar > 0)
    assert np.array_equal(bar, result.mesh_bar("r1"))  # type: ignore[attr-defined]
    change = 10 * np.log10(square / again.mean_square("r1"))
    assert np.all(np.abs(change) <= bar + 1e-9) and np.max(np.abs(change)) > 0


def test_without_an_error_bar_there_is_none() -> None:
    result = _swept(method="direct", error_bar=False)[2]
    assert result.mesh_bar("r0") is None and result.corrected("r0") is None  # type: ignore[attr-defined]


def test_the_next_order_stops_at_the_highest() -> None:
    box = ExactBox((1.0, 0.8, 0.6), {(0, 0): 1.0}, 2.0, 0.01)
    planes = (np.array([0.0, 1.0]), np.array([0.0, 0.8]), np.array([0.0, 0.6]))
    case = box.case(planes, np.array([100.0]), np.array([[0.5, 0.4, 0.3]]))
    assert set(next_order(discretise(case, 7)).dofs.orders) == {8} == set(next_order(discretise(case, 8)).dofs.orders)
    assert solve(case, order=8).mesh_bar("r0") is None


def test_kappa() -> None:
    e = (np.array([[1.0 + 1j], [2.0]]),)
    assert kappa(e, (2.5 * e[0],)) == pytest.approx(2.5)
    assert kappa((0 * e[0],), e) == UNCALIBRATED


def test_orders_are_raised_once_where_the_bar_says_so(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A rule that is too easy is found out; an interrupted raised sweep goes on without solving the first one again."""
    box = random_box(np.random.default_rng(7))
    planes = random_planes(np.random.default_rng(7), box.lengths, 3)
    case = box.case(planes, np.linspace(200.0, 400.0, 9), np.array([[0.2, 0.3, 0.2], [0.4, 0.2, 0.5]]), accuracy=0.2)
    monkeypatch.setattr(sweep, "discretise", lambda case, order=0: discretise(case, order or 2))
    first, raised = solve(case, order=2), solve(case, tmp_path / "lines")
    assert first.mesh_error_db is not None and first.mesh_error_db > 0.2 and "orders_raised" not in first.provenance
    assert raised.order == 3 and "rms where 0.2 dB are wanted" in raised.provenance["orders_raised"]
    assert raised.mesh_error_db is not None and raised.mesh_error_db < first.mesh_error_db
    seen: list[Progress] = []
    solve(case, tmp_path / "lines", report=seen.append)
    assert [p.resumed for p in seen if p.done == p.total] == [9, 9]
