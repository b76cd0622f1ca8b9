"""The error bar of the mesh against true errors of fields in closed form, and what a bar costs."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from exact_box import random_box, random_planes

from bench import Row, benchmark, timed
from murmesh.plugin.load import load_case_file
from murmesh.sample_geometry import __file__ as home
from murmesh.solver.sweep import solve


@benchmark("errorbar")
def errorbar(quick: bool) -> Iterator[Row]:
    """Effectivity |eta| / |p - p_h| in sixty exact cases, and the corrected pressure."""
    count = 12 if quick else 60
    found = np.array([_one(seed) for seed in range(count)])
    good = float(np.mean((found[:, 0] > 0.8) & (found[:, 0] < 1.25)))
    yield Row(f"{count} exact cases: effectivity in 0.8..1.25", good, "of all", "boxes in closed form", 0.9, at_least=True)
    yield Row("error left by the corrected pressure, median", float(np.median(found[:, 1])), "x", "error of the pressure")
    case = load_case_file(home.replace("__init__.py", "cab.toml"))
    bare = case.with_(sweep=case.sweep.with_(error_bar=False))
    solve(bare)
    without, with_bar = (timed(lambda c=c: solve(c))[1] for c in (bare, case))  # type: ignore[misc]
    yield Row("cab: sweep with error bar", with_bar / without, "x", f"without, {without:.1f} s")


def _one(seed: int) -> tuple[float, float]:
    rng = np.random.default_rng(seed)
    box = random_box(rng)
    order = int(rng.integers(2, 6))
    receivers = np.array(box.lengths) * (0.05 + 0.9 * rng.random((12, 3)))
    f = float(rng.uniform(120, 420))
    planes = random_planes(rng, box.lengths, {2: 4, 3: 3, 4: 2, 5: 2}[order])
    held = solve(box.case(planes, np.array([f]), receivers, order=order)).load_cases[0]
    miss = box.pressure(receivers, f) - held.contributions[0, :, 0]
    eta = held.mesh_error[0, :, 0]
    return tuple(float(np.linalg.norm(v) / np.linalg.norm(miss)) for v in (eta, miss - eta))  # type: ignore[return-value]
