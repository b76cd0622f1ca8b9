"""What-ifs on the demonstration: what tables cost, what a combination costs, and how well gains are predicted."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from bench import Row, benchmark, best_of, timed
from murmesh.plugin.load import load_case_file
from murmesh.sample_geometry import __file__ as home
from murmesh.solver.sweep import solve
from murmesh.solver.treatment import Goal, result_gain, treated_case
from murmesh.solver.uncertainty import spread
from murmesh.solver.whatif import WhatIf


@benchmark("treatment")
def treatment(quick: bool) -> Iterator[Row]:
    """The cab: 234 lines, 16 options on 10 panels, two ears."""
    case = load_case_file(home.replace("__init__.py", "cab.toml"))
    case = case.with_(sweep=case.sweep.with_(error_bar=False))
    solve(case)
    result, sweep = timed(lambda: solve(case))
    whatif, tables = timed(lambda: WhatIf.build(result))
    goal = Goal()
    yield Row("cab: tables / certified sweep", tables / sweep, "x", f"sweep {sweep:.1f} s, tables {tables:.1f} s", 10)
    order = np.argsort([-whatif.gain((i,), goal) for i in range(len(whatif.options))]).tolist()
    chosen: list[int] = []
    for i in order:
        if whatif.options[i].panel not in {whatif.options[j].panel for j in chosen}:
            chosen.append(i)
    walls = [i for i in chosen if whatif.changes[i].walls]
    for count in (1, 3, 5):
        seconds = best_of(5, lambda c=walls[:count]: whatif.gain(c, goal))  # type: ignore[misc]
        yield Row(f"cab: a combination of {count} absorbers", 1000 * seconds, "ms", "234 lines, 14 sample points", 20)
    known = case.ranges.with_(damping=1.0)
    drawn = [[whatif.act(i) for i in chosen] for chosen in (*([i] for i in order[:4]), *(chosen[:n] for n in (2, 3)))]
    _, seconds = timed(lambda: spread(whatif, drawn, goal, known, 200))
    yield Row("cab: 200 samples, damping known", seconds, "s", f"{len(drawn)} sets", 10)
    _, seconds = timed(lambda: spread(whatif, drawn, goal, case.ranges, 200))
    yield Row("cab: 200 samples, tables of two dampings included", seconds, "s", f"{len(drawn)} sets")
    for name, sets, target in (
        ("single", [[i] for i in (order[:3] if quick else order)], 1e-3),
        ("five", [chosen[:5], walls[:5]], 1e-2),
    ):
        off = [abs(whatif.gain(s, goal) - result_gain(result, solve(treated_case(case, _of(whatif, s))), goal)) for s in sets]
        yield Row(f"cab: gain, {name}", max(off), "dB", f"{len(sets)} full solutions", target)


def _of(whatif: WhatIf, chosen: list[int]) -> list:  # type: ignore[type-arg]
    return [whatif.options[i] for i in chosen]
