"""The reduced sweep against the direct loop with the same solver: 481 lines, four wall laws, five receivers, thirty panels."""

from __future__ import annotations

import tempfile
import time
import warnings
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
from random_case import random_case

from bench import Row, benchmark, timed
from meshes import grid
from murmesh.solver import reduced
from murmesh.solver.case.boundary import Impedance, Vibrating
from murmesh.solver.case.load import LoadCase, SurfaceVelocity
from murmesh.solver.case.medium import Air, LossFactor
from murmesh.solver.case.model import Case, Mesh, Receiver, Region, Surface, Sweep
from murmesh.solver.case.motion import Uniform
from murmesh.solver.case.spectrum import Table
from murmesh.solver.case.wall import Given, Layers, MassSpringDamper, Resonator, WallLaw
from murmesh.solver.engine import Engine
from murmesh.solver.errors import FallbackWarning, ValidityWarning
from murmesh.solver.receiver_points import locate_receivers
from murmesh.solver.result import write_result
from murmesh.solver.space import discretise
from murmesh.solver.sweep import solve
from murmesh.solver.system import build_system

LENGTHS = (1.7, 1.5, 1.66)
LAWS: tuple[WallLaw, ...] = (
    Layers.example(),
    Given(Table(np.array([20.0, 100, 250, 500]), np.array([8 - 20j, 4 - 6j, 2 - 2j, 1.5 - 1j]))),
    MassSpringDamper.example(),
    Resonator.example(),
)


def box_case(cells: tuple[int, int, int], lines: int = 481) -> Case:
    """A box of order 4: 6 patches on each of five walls vibrate, the sixth wall carries four impedance laws."""
    box = grid(*(np.linspace(0, length, n + 1) for length, n in zip(LENGTHS, cells, strict=True)))
    patches: dict[str, np.ndarray] = {}
    for name, across in (("x0", (1, 2)), ("x1", (1, 2)), ("y0", (0, 2)), ("y1", (0, 2)), ("z0", (0, 1)), ("z1", (0, 1))):
        faces = box.surfaces[name]
        middle = box.nodes[faces].mean(axis=1)
        parts = (2, 2) if name == "z1" else (2, 3)
        i, j = (np.minimum((middle[:, a] / LENGTHS[a] * n).astype(int), n - 1) for a, n in zip(across, parts, strict=True))
        patches |= {f"{name}_{a}{b}": faces[(i == a) & (j == b)] for a in range(parts[0]) for b in range(parts[1])}
    kinds = [Impedance(LAWS[n - 30]) if n >= 30 else Vibrating() for n in range(len(patches))]
    rng = np.random.default_rng(1)
    moving = list(patches)[:30]
    phases = np.exp(2j * np.pi * rng.random(30))
    loads = tuple(SurfaceVelocity(n, Uniform(complex(1e-3 * p))) for n, p in zip(moving, phases, strict=True))
    receivers = tuple(Receiver(f"r{i}", tuple(np.array(LENGTHS) * (0.2 + 0.6 * rng.random(3)))) for i in range(5))
    index = np.repeat(np.arange(len(patches)), [len(faces) for faces in patches.values()])
    mesh = Mesh(box.nodes, box.tets, np.zeros(len(box.tets), np.int64), np.concatenate(list(patches.values())), index)
    return Case(
        mesh,
        (Region("air", Air(), LossFactor(0.01)),),
        tuple(Surface(name, kind) for name, kind in zip(patches, kinds, strict=True)),
        Sweep(np.linspace(20.0, 500.0, lines), order=4, error_bar=False),
        (LoadCase("run", loads, "tones"),),
        receivers,
    )


@benchmark("sweep")
def sweep(quick: bool) -> Iterator[Row]:
    """Sizes of about 20k and 90k unknowns; the large direct loop is timed on lines spread over the band."""
    warnings.simplefilter("ignore", ValidityWarning)
    yield from _compared(box_case((7, 7, 6)), 20 if quick else 1, 8.0)
    if not quick:
        yield from _compared(box_case((11, 11, 11)), 20, 30.0)
    yield from _certificates(8 if quick else 50)


def _compared(case: Case, every: int, target: float) -> Iterator[Row]:
    space = discretise(case)
    samples = locate_receivers(case, space.geometry)
    system = build_system(space, samples)
    lines = system.values(case.sweep.frequencies)
    engine = Engine.of(system)
    engine.line(lines[0])  # the first factorisation of a process is slower
    (_, certificate, found), seconds = timed(lambda: reduced.reduce(engine, samples, lines, case.sweep.tolerance))
    chosen = range(0, len(lines), every)
    start = time.perf_counter()
    exact = {i: engine.line(lines[i]) for i in chosen}
    direct = (time.perf_counter() - start) / len(exact) * len(lines)
    name = f"{system.size // 1000}k unknowns, 481 lines"
    what = f"direct loop of {direct:.0f} s ({len(exact)} of {len(lines)} lines timed), same solver"
    yield Row(f"{name}: factorisations", certificate.factorisations, "", f"certified: {certificate.certified}", 10)
    yield Row(f"{name}: times faster", direct / seconds, "x", what, target, at_least=True)
    yield Row(f"{name}: reduced sweep", seconds, "s", "analysis and matrices not counted on either side")
    worst = max(
        reduced.deviation(samples, found[i].responses[0].contributions, line.responses[0].contributions, lines[i].mix[0])
        for i, line in exact.items()
    )
    yield Row(f"{name}: worst deviation", worst, "dB", f"levels and 150 transfers on {len(exact)} direct lines", 0.01)
    fields = len(lines) * system.size * 16 / 2**20
    yield Row(f"{name}: result file / fields", _file_size(case) / fields, "", f"{fields:.0f} MiB of stored fields", 0.5)


def _file_size(case: Case) -> float:
    """MiB of the result file, model included."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "result.h5"
        write_result(solve(case), path)
        return path.stat().st_size / 2**20


def _certificates(count: int) -> Iterator[Row]:
    """Random cases of every kind: how many certificates are false, and how many cannot be had."""
    false, refused, factorised, worst = 0, 0, [], 0.0
    for seed in range(count):
        case = random_case(seed)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", FallbackWarning)
            found = solve(case)
        if found.certificate is None or not found.certificate.certified:
            refused += 1
            continue
        exact = solve(replace(case), method="direct")
        samples = locate_receivers(case, exact.space.geometry)
        off = _worst(samples, found, exact)
        worst, false = max(worst, off), false + (off > case.sweep.tolerance)
        factorised.append(found.certificate.factorisations / len(found.frequencies))
    yield Row(f"{count} random cases: false certificates", false, "", f"every line solved directly; worst {worst:.1e} dB", 0)
    yield Row(f"{count} random cases: not certified", refused, "", "these fall back to direct lines")
    yield Row(f"{count} random cases: lines factorised", float(np.mean(factorised)), "of all", "40 to 120 lines")


def _worst(samples: object, found: object, exact: object) -> float:
    worst = 0.0
    for a, b in zip(found.load_cases, exact.load_cases, strict=True):  # type: ignore[attr-defined]
        mix = found.case.load_case(a.name).combination.factors(found.frequencies, len(a.loads))  # type: ignore[attr-defined]
        for i in range(len(mix)):
            worst = max(worst, reduced.deviation(samples, a.contributions[i], b.contributions[i], mix[i]))  # type: ignore[arg-type]
    return worst
