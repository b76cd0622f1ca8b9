"""The demonstration's cab end to end: seconds of each stage, and what the direct loop over the same lines would take."""

from __future__ import annotations

import tempfile
from collections.abc import Iterator
from importlib.resources import as_file, files
from pathlib import Path

from bench import Row, benchmark, timed
from murmesh.plugin.load import load_case_file
from murmesh.plugin.probe import gmsh_missing
from murmesh.solver.case.hdf5 import read_case
from murmesh.solver.case.model import Case
from murmesh.solver.contribution import rank
from murmesh.solver.engine import Engine
from murmesh.solver.receiver_points import locate_receivers
from murmesh.solver.result import read_result, write_result
from murmesh.solver.space import discretise
from murmesh.solver.sweep import solve
from murmesh.solver.system import System, build_system


@benchmark("cab")
def cab(quick: bool) -> Iterator[Row]:
    missing = gmsh_missing()
    case, seconds = timed(_shipped if missing else _meshed)
    yield Row("cab: mesh and tags", seconds, "s", "gmsh cannot run: the shipped case is read" if missing else "")
    if quick:
        case = case.with_(sweep=case.sweep.with_(frequencies=case.sweep.frequencies[::4], field_frequencies=()))
    frequencies = case.sweep.frequencies
    system, seconds = timed(lambda: _system(case))
    yield Row(f"cab: discretised, {system.size} unknowns", seconds, "s")
    engine, seconds = timed(lambda: Engine.of(system))
    yield Row("cab: assembled and analysed", seconds, "s")
    some = system.values(frequencies[:: max(1, len(frequencies) // 5)])
    _, seconds = timed(lambda: [engine.line(values) for values in some])
    direct = seconds / len(some) * len(frequencies)
    result, seconds = timed(lambda: solve(case))
    note = f"direct loop, from {len(some)} of its lines: {direct:.1f} s"
    yield Row(f"cab: sweep of {len(frequencies)} lines, all stages", seconds, "s", note)
    _, seconds = timed(lambda: [rank(result, [], load_case=held.name) for held in result.load_cases])
    yield Row("cab: levels and ranking", seconds, "s")
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "cab_result.h5"
        _, seconds = timed(lambda: (write_result(result, path), read_result(path)))
        yield Row("cab: result written and read", seconds, "s")
        yield Row("cab: result file", path.stat().st_size / 2**20, "MiB")


def _shipped() -> Case:
    with as_file(files("murmesh.sample_geometry") / "cab_case.h5") as path:
        return read_case(path)


def _meshed() -> Case:
    with as_file(files("murmesh.sample_geometry") / "cab.toml") as path:
        return load_case_file(path)


def _system(case: Case) -> System:
    space = discretise(case)
    return build_system(space, locate_receivers(case, space.geometry))
