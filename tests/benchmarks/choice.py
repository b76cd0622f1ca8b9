"""The choice of treatments within limits against every set there is, and what it costs."""

from __future__ import annotations

from collections.abc import Iterator
from unittest.mock import patch

import numpy as np

from bench import Row, benchmark, timed
from modal_cavity import Cavity
from murmesh.plugin.load import load_case_file
from murmesh.sample_geometry import __file__ as home
from murmesh.solver import choice
from murmesh.solver.case.catalogue import Limits
from murmesh.solver.choice import Choice, Chosen, Energy, choose
from murmesh.solver.sweep import solve
from murmesh.solver.treatment import Goal, Option
from murmesh.solver.whatif import WhatIf

BUDGETS = 20


@benchmark("choice")
def choice_(quick: bool) -> Iterator[Row]:
    """Gain of the choice as a part of the best, over twenty budgets: invented cavities, and the cab's own what-ifs."""
    found = [_cavity(number) for number in range(BUDGETS)]
    yield from _rows("12 panels, at most 3 chosen", found)
    if not quick:
        yield from _cab()


def _limits(number: int) -> Limits:
    return Limits(mass=1.5 + 0.3 * number, cost=25.0 + 4.0 * number, panels=3)


def _cavity(number: int) -> tuple[float, float]:
    cavity, limits = Cavity(number % 5), _limits(number)
    best = max(cavity.enumerated(limits).values())
    found = _searched(cavity.options, limits, cavity.energy)
    return found.candidates[0].gain / best, float(found.computed)


def _cab() -> Iterator[Row]:
    case = load_case_file(home.replace("__init__.py", "cab.toml"))
    result = solve(case)
    whatif, seconds = timed(lambda: WhatIf.build(result))
    yield Row("cab: tables of the what-ifs", seconds, "s", f"{len(whatif.options)} options, {len(result.frequencies)} lines")
    goal, known = Goal(), dict[Chosen, float]()

    def energy(chosen: Chosen) -> float:
        if chosen not in known:
            known[chosen] = whatif.energy(whatif.mean_squares(chosen), goal)
        return known[chosen]

    options, every = whatif.options, choice._Search(whatif.options, Limits(panels=3), energy)
    sets = [tuple(sorted(chosen)) for chosen in every.sets()]
    _, all_of_them = timed(lambda: [energy(chosen) for chosen in sets])
    yield Row("cab: one set, mean over all with at most 3", 1e3 * all_of_them / len(sets), "ms", f"{len(sets)} sets", 20.0)
    found = []
    for number in range(BUDGETS):
        searched = _searched(options, _limits(number), energy)
        within = choice._Search(options, _limits(number), energy)
        best = min(energy(chosen) for chosen in sets if within.allowed(chosen))
        found.append((searched.candidates[0].gain / (10 * np.log10(energy(()) / best)), float(searched.computed)))
    yield from _rows("cab, at most 3 chosen", found)


def _searched(options: list[Option] | tuple[Option, ...], limits: Limits, energy: Energy) -> Choice:
    """The choice by search alone: nothing is enumerated."""
    with patch.object(choice, "ENUMERATED", 0):
        return choose(options, limits, energy)


def _rows(name: str, found: list[tuple[float, float]]) -> Iterator[Row]:
    parts, computed = np.array(found).T
    every = "every set of each budget"
    yield Row(f"{name}: gain, mean", float(parts.mean()), "of best", every, 0.98, at_least=True)
    yield Row(f"{name}: gain, worst budget", float(parts.min()), "of best", every, 0.96, at_least=True)
    yield Row(f"{name}: sets computed exactly, most", float(computed.max()), "sets", f"{BUDGETS} budgets")
