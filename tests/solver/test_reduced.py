"""The reduced sweep: never a false certificate, a fallback that is right, and every field of the band from the file."""

from __future__ import annotations

import warnings
from dataclasses import replace
from pathlib import Path

import h5py
import numpy as np
import pytest
import scipy.sparse as sp
from random_case import random_case

from cases import case_of, lossy
from meshes import box
from murmesh.solver import reduced, sweep
from murmesh.solver.case.load import Monopole
from murmesh.solver.case.model import Case
from murmesh.solver.engine import Engine
from murmesh.solver.errors import FallbackWarning, FormatError, ResultError, ValidityWarning
from murmesh.solver.receiver_points import locate_receivers
from murmesh.solver.result import Result, read_result, write_result
from murmesh.solver.space import discretise
from murmesh.solver.sweep import solve
from murmesh.solver.system import System, Term, build_system

SEEDS = range(100, 108)


def _solved(case: Case, method: str) -> Result:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ValidityWarning)
        return solve(case, method=method)


def worst_deviation(found: Result, exact: Result) -> float:
    """Largest deviation [dB] of a level or contribution over all lines, as the certificate means it."""
    samples = locate_receivers(found.case, found.space.geometry)
    worst = 0.0
    for a, b in zip(found.load_cases, exact.load_cases, strict=True):
        mix = found.case.load_case(a.name).combination.factors(found.frequencies, len(a.loads))
        for i in range(len(found.frequencies)):
            worst = max(worst, reduced.deviation(samples, a.contributions[i], b.contributions[i], mix[i]))
    return worst


@pytest.mark.parametrize("seed", SEEDS)
def test_a_certificate_is_never_false(seed: int) -> None:
    case = random_case(seed)
    found = _solved(case, "reduced")
    assert found.certificate is not None and found.certificate.certified, found.certificate
    assert found.certificate.factorisations < len(found.frequencies) / 3
    exact = _solved(case, "direct")
    assert worst_deviation(found, exact) <= case.sweep.tolerance
    for a, b in zip(found.load_cases, exact.load_cases, strict=True):
        scale = np.abs(b.supplied).sum(axis=1, keepdims=True)
        assert np.abs(a.supplied - b.supplied).max(initial=0.0) < 1e-2 * scale.max()
        assert np.abs(found.imbalance(a.name)).max() < 1e-6


def _cancelling(seed: int) -> Case:
    """A pair of opposite sources 0.2 mm apart beside a weak third one: the parts are far larger than their sum."""
    rng = np.random.default_rng(seed)
    lengths = 1.2 + 1.6 * rng.random(3)
    sources = (("one", 0.3 * lengths, 1e-4), ("other", 0.3 * lengths + 1e-4, -1e-4), ("far", 0.8 * lengths, 1e-7))
    loads = [Monopole(name, tuple(place), complex(strength)) for name, place, strength in sources]
    ears = lengths * (0.15 + 0.7 * rng.random((3, 3)))
    damping = lossy(float(10 ** rng.uniform(-5, -2)))
    return case_of(
        box(3, 3, 3, tuple(lengths)), {}, loads, np.linspace(30.0, 420.0, 120),
        {f"ear{i}": tuple(ear) for i, ear in enumerate(ears)}, damping=damping, order=3, error_bar=False, method="reduced",
    )  # fmt: skip


@pytest.mark.parametrize("seed", [4, 18])
def test_the_estimate_sees_loads_that_cancel(seed: int) -> None:
    """Their sum is found long before their contributions are, and the certificate speaks of both."""
    case = _cancelling(seed)
    found = _solved(case, "reduced")
    assert found.certificate is not None and found.certificate.certified
    worst = worst_deviation(found, _solved(case, "direct"))
    assert worst <= 2 * found.certificate.estimate.max() <= 2 * case.sweep.tolerance


def test_fields_of_any_frequency_come_from_the_file(tmp_path: Path) -> None:
    case = random_case(101)
    write_result(_solved(case, "reduced"), tmp_path / "result.h5")
    again = read_result(tmp_path / "result.h5")
    assert again.model is not None and again.certificate is not None and again.certificate.certified
    between = float(0.5 * (case.sweep.frequencies[20] + case.sweep.frequencies[21]))
    alone = _solved(
        case.with_(sweep=case.sweep.with_(frequencies=np.array([between]), field_frequencies=np.array([between]))), "direct"
    )
    for held in alone.load_cases:
        exact, found = held.fields[0], again.field(between, held.name)
        assert np.linalg.norm(found - exact) < 1e-3 * np.linalg.norm(exact)
    middle = again.space.geometry.nodes.mean(axis=0)[None]
    assert np.allclose(again.pressure_at(middle, between), alone.pressure_at(middle, between), rtol=1e-2)
    with pytest.raises(ResultError, match=r"a field is asked at 900 Hz, but the sweep covers"):
        again.field(900.0)


def test_what_cannot_be_certified_is_solved_directly() -> None:
    case = random_case(102)
    hopeless = case.with_(sweep=case.sweep.with_(tolerance=1e-13))
    with pytest.warns(FallbackWarning, match="no certificate for 1e-13 dB after .* lines: every line was solved directly"):
        found = _solved(hopeless, "reduced")
    assert found.model is None and found.certificate is not None and not found.certificate.certified
    exact = _solved(case, "direct")
    assert worst_deviation(found, exact) < 1e-9
    assert np.all(np.isfinite(found.load_cases[0].residual))


def test_factorised_lines_are_exact_and_the_others_have_no_residual() -> None:
    found = _solved(random_case(103), "reduced")
    assert found.certificate is not None
    known = np.isfinite(found.load_cases[0].residual)
    assert np.array_equal(found.frequencies[known], np.sort([c.frequency for c in found.certificate.checks]))
    assert found.load_cases[0].residual[known].max() < 1e-9


def test_a_model_that_agrees_by_chance_is_not_believed(monkeypatch: pytest.MonkeyPatch) -> None:
    """With checks that never disagree the estimate alone must stop the certificate."""
    case = random_case(104)
    samples = locate_receivers(case, discretise(case).geometry)
    system = build_system(discretise(case), samples)
    monkeypatch.setattr(reduced.Check, "agrees", lambda self, tolerance: True)
    monkeypatch.setattr(reduced, "KRYLOV_COLUMNS", 1)
    monkeypatch.setattr(reduced, "FEWEST_MOMENTS", 0)
    monkeypatch.setattr(reduced, "MOST_MOMENTS", 0)
    _, certificate, found = reduced.reduce(Engine.of(system), samples, system.values(case.sweep.frequencies), 1e-6)
    assert not certificate.certified and found == []


def _unsymmetric(system: System) -> System:
    """The sum with one more, unsymmetric, term."""
    n = system.size
    skew = sp.random(n, n, density=2.0 / n, random_state=np.random.default_rng(3), format="csr")
    scale = 0.05 * abs(system.terms[0].matrix).sum() / n / 1.2
    term = Term("volume/air", lambda f: (1 + 1j) * f / 400.0, lambda: (scale * (skew - skew.T)).tocsr(), symmetric=False)
    return replace(system, terms=(*system.terms, term))


@pytest.mark.parametrize("seed", [105, 106])
def test_unsymmetric_systems(seed: int) -> None:
    case = random_case(seed)
    space = discretise(case)
    samples = locate_receivers(case, space.geometry)
    system = _unsymmetric(build_system(space, samples))
    assert not system.symmetric
    full, lines = Engine.of(system), system.values(case.sweep.frequencies)
    _, certificate, found = reduced.reduce(full, samples, lines, 0.01)
    assert certificate.certified
    for i, line in enumerate(found):
        if i % 9 == 4:
            exact = full.line(lines[i])
            assert exact.responses[0].closure < 1e-9
            for a, b, mix in zip(line.responses, exact.responses, lines[i].mix, strict=True):
                assert reduced.deviation(samples, a.contributions, b.contributions, mix) < 0.01


def test_finished_steps_are_not_solved_again(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    case = random_case(107)
    first = _solved_in(case, tmp_path / "lines")
    assert first.certificate is not None
    (tmp_path / "lines" / f"step{first.certificate.factorisations - 1:04d}.npz").write_bytes(b"PK broken")
    count = _counted(monkeypatch)
    second = _solved_in(case, tmp_path / "lines")
    assert len(count) == 1
    assert np.array_equal(first.load_cases[0].contributions, second.load_cases[0].contributions)
    assert second.certificate is not None and second.certificate.checks == first.certificate.checks


def _solved_in(case: Case, journal: Path) -> Result:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ValidityWarning)
        return solve(case, journal)


def _counted(monkeypatch: pytest.MonkeyPatch) -> list[float]:
    """Frequencies of the lines that a full engine factorises from now on."""
    count: list[float] = []
    known = Engine.factor

    def factor(self: Engine, matrix: object) -> object:
        if self.analysis is not None:
            count.append(1.0)
        return known(self, matrix)

    monkeypatch.setattr(sweep.Engine, "factor", factor)
    return count


def _cut(file: h5py.File, name: str) -> None:
    held = file[name][()]
    del file[name]
    file[name] = held[..., :-1]


BROKEN = {
    "basis": lambda file: _cut(file, "model/basis"),
    "matrices": lambda file: _cut(file, "model/matrices"),
    "missing": lambda file: file["model"].__delitem__("receivers"),
    "loads": lambda file: file["model"].__delitem__("loads"),
    "estimate": lambda file: _cut(file, "certificate/estimate"),
}


@pytest.mark.parametrize("what", BROKEN)
def test_broken_models_are_refused(tmp_path: Path, what: str) -> None:
    path = tmp_path / "result.h5"
    write_result(_solved(random_case(101), "reduced"), path)
    with h5py.File(path, "r+") as file:
        BROKEN[what](file)
    with pytest.raises(FormatError, match="solve the case again"):
        read_result(path)
