"""Sweeps killed at random moments: they go on, end with the same numbers, and never solve a finished line again."""

from __future__ import annotations

import random
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np

from bench import Row, benchmark
from cases import case_of, lossy
from meshes import box
from murmesh.solver.case.boundary import Impedance, Vibrating
from murmesh.solver.case.hdf5 import write_case
from murmesh.solver.case.load import SurfaceVelocity
from murmesh.solver.case.model import Case
from murmesh.solver.case.motion import Uniform
from murmesh.solver.case.wall import Given
from murmesh.solver.journal import Journal
from murmesh.solver.result import Result, read_result
from murmesh.solver.sweep import solve

KILLS = 20


@benchmark("resume")
def resume(quick: bool) -> Iterator[Row]:
    """SIGKILL at `KILLS` random moments of a direct and of a reduced sweep through `python -m murmesh.solver`."""
    for method in ("direct", "reduced"):
        yield from _killed(method, 5 if quick else KILLS)


def _case(method: str) -> Case:
    loads = [SurfaceVelocity("x0", Uniform(1e-3 + 0j)), SurfaceVelocity("y0", Uniform(1e-3j))]
    kinds = {"x0": Vibrating(), "y0": Vibrating(), "x1": Impedance(Given(3 - 2j))}
    return case_of(
        box(4, 4, 3, (1.2, 1.0, 0.8)), kinds, loads, np.linspace(60.0, 400.0, 60), {"ear": (0.4, 0.5, 0.6)},
        damping=lossy(0.02), order=4, method=method,
    )  # fmt: skip


def _killed(method: str, kills: int) -> Iterator[Row]:
    case = _case(method)
    exact = solve(case)
    draw = random.Random(1)
    with tempfile.TemporaryDirectory() as folder:
        source, target = Path(folder) / "case.h5", Path(folder) / "result.h5"
        write_case(case, source)
        started = time.perf_counter()
        _run(source, target).wait()
        whole = time.perf_counter() - started
        worst, lost, done = 0.0, 0, 0
        for _ in range(kills):
            target.unlink(missing_ok=True)
            child = _run(source, target)
            time.sleep(whole * draw.uniform(0.3, 1.0))
            child.send_signal(signal.SIGKILL)
            child.wait()
            before = _finished(Journal.at(target))
            if _run(source, target).wait() != 0:
                lost += 1
                continue
            worst, done = max(worst, _off(read_result(target), exact)), done + len(before)
    yield Row(f"{method} sweep, {kills} kills: not resumable", lost, "", f"{done} finished pieces of work were kept", 0)
    yield Row(f"{method} sweep, {kills} kills: numbers off by", worst, "", "the sweep that was not killed", 1e-9)


def _run(source: Path, target: Path) -> subprocess.Popen[bytes]:
    command = [sys.executable, "-m", "murmesh.solver", str(source), str(target)]
    return subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)


def _finished(folder: Path) -> list[Path]:
    return sorted(folder.glob("*.npz")) if folder.is_dir() else []


def _off(found: Result, exact: Result) -> float:
    a, b = (r.load_cases[0].contributions for r in (found, exact))
    return float(np.abs(a - b).max() / np.abs(b).max())
