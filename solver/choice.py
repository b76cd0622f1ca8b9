"""Which treatments to choose within limits of mass, cost, thickness and number.

    best gain within the limits, or the least cost that reaches a wanted gain

What a set of treatments does is asked of `energy`, the band energy with the set in place (`treatment.WhatIf`). Small sets are
enumerated. Otherwise the energy of a set is first guessed from singles and pairs,

    E(S) ~ E_0 + sum_i d_i + sum_ij d_ij,   d_i = E_i - E_0,   d_ij = E_ij - E_i - E_j + E_0,

a branch and bound over this guess keeps its best sets (with a wanted gain: the cheapest that seem to reach it), greedy choices
improved by swaps are added (exact energies all along), and the energies of all of them are computed exactly. Never ranked by
gradients: near resonances their signs are wrong.
"""

from __future__ import annotations

import fnmatch
import heapq
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from itertools import combinations, product

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.catalogue import Limits
from murmesh.solver.errors import CaseError
from murmesh.solver.treatment import Option

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Chosen = tuple[int, ...]
Energy = Callable[[Chosen], float]

ENUMERATED = 400
"""Number of sets up to which all are computed exactly."""
KEPT = 300
"""Sets of the guess that are computed exactly."""
VISITED = 400_000
"""Branches of the search after which the guess's best sets so far are taken."""
SLACK = 1.03
"""Energy above the wanted one at which the guess still lets a set pass to be computed (0.13 dB)."""


@dataclass(frozen=True)
class Candidate:
    """A set of options with its gain [dB], mass [kg] and cost [EUR]."""

    chosen: Chosen
    gain: float
    mass: float
    cost: float


@dataclass(frozen=True)
class Choice:
    """Candidates, best first, the front of gain against mass and cost, how they were found, and how many were computed."""

    candidates: tuple[Candidate, ...]
    front: tuple[Candidate, ...]
    how: str
    computed: int


@dataclass
class _Search:
    """Options that may be used, limits, and every exact energy computed so far."""

    options: Sequence[Option]
    limits: Limits
    energy: Energy
    known: dict[Chosen, float] = field(default_factory=dict)

    @cached_property
    def usable(self) -> list[int]:
        """Options that the limits on thickness, panels, mass and cost leave by themselves."""
        return [
            i
            for i, option in enumerate(self.options)
            if not any(fnmatch.fnmatchcase(option.panel, pattern) for pattern in self.limits.exclude)
            and (self.limits.thickness is None or option.thickness <= self.limits.thickness + 1e-12)
            and self.affordable((i,))
        ]

    @cached_property
    def starts(self) -> list[Chosen]:
        """What every set begins with: an option on each panel that must be treated; the empty set where none must be."""
        ways = [[i for i in self.usable if self.options[i].panel == panel] for panel in dict.fromkeys(self.limits.force)]
        return [chosen for chosen in product(*ways) if self.affordable(chosen)]

    @cached_property
    def free(self) -> list[int]:
        """Usable options on panels that need not be treated."""
        return [i for i in self.usable if self.options[i].panel not in self.limits.force]

    def affordable(self, chosen: Chosen) -> bool:
        """Whether mass, cost and number are within limits, one option per panel."""
        limits, used = self.limits, [self.options[i] for i in chosen]
        return (
            len({option.panel for option in used}) == len(used)
            and (limits.panels is None or len(used) <= limits.panels)
            and (limits.mass is None or sum(option.mass for option in used) <= limits.mass + 1e-9)
            and (limits.cost is None or sum(option.cost for option in used) <= limits.cost + 1e-9)
        )

    def allowed(self, chosen: Chosen) -> bool:
        """Whether a set keeps to every limit."""
        panels = {self.options[i].panel for i in chosen}
        return set(self.limits.force) <= panels and set(chosen) <= set(self.usable) and self.affordable(chosen)

    def cost(self, chosen: Chosen) -> float:
        """What a set costs."""
        return sum(self.options[i].cost for i in chosen)

    def exact(self, chosen: Chosen) -> float:
        """The energy of a set, computed once."""
        key = tuple(sorted(chosen))
        if key not in self.known:
            self.known[key] = self.energy(key)
        return self.known[key]

    def worth(self, energy: float, chosen: Chosen, slack: float = 1.0) -> tuple[float, float]:
        """What is looked for, lower is better: the energy; or the cost of what reaches the wanted gain, the energy before.

        A lower energy at no higher cost is never worse, which bounds whole branches.
        """
        if self.limits.wanted_gain is None:
            return energy, 0.0
        target = self.exact(()) * 10 ** (-self.limits.wanted_gain / 10)
        return (self.cost(chosen), energy) if energy <= slack * target else (np.inf, energy)

    def sets(self) -> Iterator[Chosen]:
        """All allowed sets; stops a branch as soon as it costs too much."""
        stack = [(chosen, 0) for chosen in self.starts]
        while stack:
            chosen, start = stack.pop()
            yield chosen
            for place in range(start, len(self.free)):
                longer = (*chosen, self.free[place])
                if self.affordable(longer):
                    stack.append((longer, place + 1))


def choose(options: Sequence[Option], limits: Limits, energy: Energy) -> Choice:
    """Search; `energy(chosen)` gives the band energy [Pa2] of a set of indices into `options`, () the baseline.

    Raises: CaseError where no set keeps to the limits, or none reaches the wanted gain.
    """
    search = _Search(options, limits, energy)
    _require_possible(search)
    if all(number < ENUMERATED for number, _ in enumerate(search.sets())):
        for chosen in search.sets():
            search.exact(chosen)
        how = f"every allowed set was computed, {len(search.known)} in all"
    else:
        how = _searched(search)
    return _ranked(search, how)


def _require_possible(search: _Search) -> None:
    for panel in search.limits.force:
        if panel not in {option.panel for option in search.options}:
            raise CaseError(f"panel '{panel}' must be treated, but no treatment may go on it; widen a treatment's panels")
        if panel not in {search.options[i].panel for i in search.usable}:
            raise CaseError(
                f"panel '{panel}' must be treated, but no set of treatments keeps to the limits: it is excluded, or every "
                "treatment of it alone is too heavy, too dear or too thick; raise a limit, or do not force it"
            )
    if not search.starts:
        raise CaseError("no set of treatments keeps to the limits; raise one of them, or force fewer panels")


def _searched(search: _Search) -> str:
    best, whole = _Pairs.of(search).best(search)
    for chosen in [*best, *_improved(search)]:
        search.exact(chosen)
    what = "the whole of it" if whole else f"its first {VISITED} branches"
    return f"singles and pairs searched by branch and bound ({what}), {len(search.known)} sets computed exactly"


@dataclass(frozen=True)
class _Pairs:
    """The guess: d_i and d_ij of the options by their numbers, zero for those that may not be used."""

    single: Floats
    pair: Floats

    @classmethod
    def of(cls, search: _Search) -> _Pairs:
        bare, usable, count = search.exact(()), search.usable, len(search.options)
        single, pair = np.zeros(count), np.zeros((count, count))
        for i in usable:
            single[i] = search.exact((i,)) - bare
        for i, j in combinations(usable, 2):
            if search.affordable((i, j)):
                pair[i, j] = pair[j, i] = search.exact((i, j)) - bare - single[i] - single[j]
        return cls(single, pair)

    def best(self, search: _Search) -> tuple[list[Chosen], bool]:
        """The `KEPT` sets that the guess thinks best; and whether the whole tree was seen."""
        order = np.array(sorted(search.free, key=lambda i: self.single[i]), dtype=np.int64)
        most = search.limits.panels or len(search.options)
        heap: list[tuple[float, float, Chosen]] = []
        stack = [(chosen, 0, search.exact(()) + self._of(chosen)) for chosen in reversed(search.starts)]
        visited = 0
        while stack and visited < VISITED:
            chosen, start, guess = stack.pop()
            visited += 1
            first, second = search.worth(guess, chosen, SLACK)
            (heapq.heappush if len(heap) < KEPT else heapq.heappushpop)(heap, (-first, -second, chosen))
            rest = order[start:]
            steps = self.single[rest] + self.pair[np.ix_(rest, np.array(chosen, dtype=np.int64))].sum(axis=1)
            lowest = guess + self._lowest(rest, steps, most - len(chosen))
            if len(heap) == KEPT and search.worth(lowest, chosen, SLACK) >= (-heap[0][0], -heap[0][1]):
                continue
            for k in range(len(rest) - 1, -1, -1):
                longer = (*chosen, int(rest[k]))
                if search.affordable(longer):
                    stack.append((longer, start + k + 1, guess + float(steps[k])))
        return [chosen for *_, chosen in heap], not stack

    def _of(self, chosen: Chosen) -> float:
        """sum_i d_i + sum_ij d_ij."""
        at = np.array(chosen, dtype=np.int64)
        return float(self.single[at].sum() + 0.5 * self.pair[np.ix_(at, at)].sum())

    def _lowest(self, rest: Ints, steps: Floats, count: int) -> float:
        """A bound from below of what `count` more options can change: every pair shares out its help to both of its ends."""
        each = steps + 0.5 * np.minimum(self.pair[np.ix_(rest, rest)], 0.0).sum(axis=1)
        return float(np.minimum(np.sort(each)[:count], 0.0).sum())


def _improved(search: _Search) -> list[Chosen]:
    """Greedy choices by gain, gain per mass and gain per cost, improved by swaps; exact energies."""
    start = min(search.starts, key=search.exact)
    weights: list[Callable[[Option], float]] = [lambda o: 1.0, lambda o: o.mass, lambda o: o.cost]
    return [_swapped(search, _greedy(search, start, weight)) for weight in weights]


def _greedy(search: _Search, chosen: Chosen, weight: Callable[[Option], float]) -> Chosen:
    """Add what lowers the energy most per weight, until nothing does or the wanted gain is reached."""
    while True:
        now = search.exact(chosen)
        steps = [(*chosen, i) for i in search.free if search.affordable((*chosen, i))]
        better = [step for step in steps if search.worth(search.exact(step), step) < search.worth(now, chosen)]
        if not better:
            return chosen
        chosen = max(better, key=lambda s: (now - search.exact(s)) / max(weight(search.options[s[-1]]), 1e-9))


def _swapped(search: _Search, chosen: Chosen) -> Chosen:
    """Replace one option by another, or by none, as long as that helps."""
    while True:
        moves = [
            (*chosen[:k], *chosen[k + 1 :], *new) for k in range(len(chosen)) for new in ((), *((i,) for i in search.usable))
        ]
        best = min((m for m in moves if search.allowed(m)), key=lambda m: search.worth(search.exact(m), m), default=chosen)
        if not search.worth(search.exact(best), best) < search.worth(search.exact(chosen), chosen):
            return chosen
        chosen = best


def _ranked(search: _Search, how: str) -> Choice:
    bare = search.exact(())
    options, limits = search.options, search.limits
    found = [
        Candidate(
            chosen,
            float(10 * np.log10(bare / max(energy, 1e-300))),
            sum(options[i].mass for i in chosen),
            sum(options[i].cost for i in chosen),
        )
        for chosen, energy in search.known.items()
        if search.allowed(chosen)
    ]
    front = _front(found)
    if limits.wanted_gain is not None:
        most = max((c.gain for c in found), default=0.0)
        found = [c for c in found if c.gain >= limits.wanted_gain]
        if not found:
            raise CaseError(
                f"no set of treatments within the limits gains {limits.wanted_gain:g} dB; the best gains {most:.2f} dB: "
                "raise a limit, or add treatments to the catalogue"
            )
        found.sort(key=lambda c: (c.cost, c.mass, -c.gain))
    else:
        found.sort(key=lambda c: (-c.gain, c.cost, c.mass))
    return Choice(tuple(found), front, how, len(search.known))


def _front(found: list[Candidate]) -> tuple[Candidate, ...]:
    """Sets that no other beats in gain, mass and cost at once, by rising cost."""
    kept = [
        c
        for c in found
        if not any(
            o.gain >= c.gain and o.mass <= c.mass and o.cost <= c.cost and (o.gain, o.mass, o.cost) != (c.gain, c.mass, c.cost)
            for o in found
        )
    ]
    return tuple(sorted(kept, key=lambda c: (c.cost, c.mass)))
