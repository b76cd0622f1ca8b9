"""Sub-bands of a direct sweep: lower lines need lower orders, and a lower order is a selection of the same unknowns.

    cost of a plan = sum over its bands of (lines of the band) n_b^1.7

n_b is the band's number of unknowns; 1.7 stands for the growth of a line's time with unknowns (common practice, no source:
between n for short fronts and n^2 for a nested dissection of a large cube; the benchmark `size` measures it).
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations

import numpy as np
import numpy.typing as npt

from murmesh.solver.dofs import DofMap
from murmesh.solver.orders import element_orders
from murmesh.solver.space import Space

Ints = npt.NDArray[np.int64]
EXPONENT = 1.7
WORTH = 0.2
"""Share of the cost that one more band must save."""
OVERHEAD = 2.0
"""A band's own analysis and matrices, in lines."""
STEPS = 8
MOST_BANDS = 4


@dataclass(frozen=True, eq=False)
class Band:
    """Lines first .. last - 1 of the sweep, solved at `orders` (t,) with `unknowns` unknowns."""

    lines: slice
    orders: Ints
    unknowns: int


def plan_bands(space: Space) -> tuple[Band, ...]:
    """The bands of the sweep of `space.case`, from low to high; one band where more do not pay.

    `space` is discretised for the highest line. Every band's orders are at most those of the next, so that
    `space.dofs.selection_of(DofMap.build(space.topology, band.orders))` restricts the matrices of `space` to a band.
    A band ends at one of eight frequencies, an equal ratio apart. A stated order leaves one band.
    """
    frequencies, top = space.case.sweep.frequencies, space.dofs.orders
    whole: tuple[Band, ...] = (Band(slice(0, len(frequencies)), top, space.dofs.n_dofs),)
    if space.case.sweep.order or len(frequencies) < 2:
        return whole
    candidates = _candidates(space, top)
    best, cost = whole, _cost(whole)
    for count in range(2, MOST_BANDS + 1):
        plans = [_plan((*chosen, whole[0])) for chosen in combinations(candidates, count - 1)]
        plan = min(plans, key=_cost, default=best)
        if _cost(plan) > (1 - WORTH) * cost:
            break
        best, cost = plan, _cost(plan)
    return best


def _candidates(space: Space, top: Ints) -> list[Band]:
    """Bands from the first line to each possible end, from low to high; none at the last line."""
    frequencies = space.case.sweep.frequencies
    ends = np.geomspace(frequencies[0], frequencies[-1], STEPS + 2)[1:-1]
    stops = np.unique(np.searchsorted(frequencies, ends * (1 + 1e-9)))
    found, orders = [], top
    for stop in stops[(stops > 0) & (stops < len(frequencies))][::-1].tolist():
        orders = np.minimum(orders, element_orders(space.case, space.topology, space.walls, float(frequencies[stop - 1])))
        found.append(Band(slice(0, stop), orders, DofMap.build(space.topology, orders).n_dofs))
    return found[::-1]


def _plan(ends: tuple[Band, ...]) -> tuple[Band, ...]:
    """The same bands, each beginning where the one before ends."""
    starts = (0, *(band.lines.stop for band in ends[:-1]))
    return tuple(Band(slice(start, b.lines.stop), b.orders, b.unknowns) for start, b in zip(starts, ends, strict=True))


def _cost(plan: tuple[Band, ...]) -> float:
    return float(sum((band.lines.stop - band.lines.start + OVERHEAD) * band.unknowns**EXPONENT for band in plan))
