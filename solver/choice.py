"""Which treatments to choose within limits of mass, cost, thickness and number.

    best gain within the limits, or the least cost that reaches a wanted gain

What a set of treatments does is asked of `energy`, the band energy with the set in place (`treatment.WhatIf`). Small sets are
enumerated. Otherwise the energy of a set is first guessed from singles and pairs,

    E(S) ~ E_0 + sum_i d_i + sum_ij d_ij,   d_i = E_i - E_0,   d_ij = E_ij - E_i - E_j + E_0,

a branch and bound over this guess keeps its best sets, a greedy choice improved by swaps is added (exact energies all
along), and the energies of all of them are computed exactly. Never ranked by gradients: near resonances their signs are wrong.
"""

from __future__ import annotations

import fnmatch
import heapq
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from itertools import combinations

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.catalogue import Limits
from murmesh.solver.errors import CaseError
from murmesh.solver.treatment import Option

Floats = npt.NDArray[np.float64]
Chosen = tuple[int, ...]
Energy = Callable[[Chosen], float]

ENUMERATED = 400
"""Number of sets up to which all are computed exactly."""
KEPT = 300
"""Sets of the guess that are computed exactly."""
VISITED = 400_000
"""Branches of the search after which the guess's best sets so far are taken."""


@dataclass(frozen=True)
class Candidate:
    """A set of options with its gain [dB], mass [kg] and cost [EUR]."""

    chosen: Chosen
    gain: float
    mass: float
    cost: float


@dataclass(frozen=True)
class Choice:
    """Candidates, best first, the front of gain against mass and cost, and how they were found."""

    candidates: tuple[Candidate, ...]
    front: tuple[Candidate, ...]
    how: str


@dataclass
class _Search:
    """Options that may be used, limits, and every exact energy computed so far."""

    options: Sequence[Option]
    limits: Limits
    energy: Energy
    known: dict[Chosen, float] = field(default_factory=dict)

    def __post_init__(self) -> None:
        names = {option.panel for option in self.options}
        for panel in self.limits.force:
            if panel not in names:
                raise CaseError(f"panel '{panel}' must be treated, but no treatment may go on it; widen a treatment's panels")

    @property
    def usable(self) -> list[int]:
        """Options that the limits on thickness, panels, mass and cost leave by themselves."""
        return [
            i
            for i, option in enumerate(self.options)
            if not any(fnmatch.fnmatchcase(option.panel, pattern) for pattern in self.limits.exclude)
            and (self.limits.thickness is None or option.thickness <= self.limits.thickness + 1e-12)
            and self.affordable((i,))
        ]

    def affordable(self, chosen: Chosen) -> bool:
        """Whether mass, cost and number are within limits, one option per panel."""
        limits, used = self.limits, [self.options[i] for i in chosen]
        return (
            len({option.panel for option in used}) == len(used)
            and (limits.panels is None or len(used) <= limits.panels)
            and (limits.mass is None or sum(option.mass for option in used) <= limits.mass + 1e-9)
            and (limits.cost is None or sum(option.cost for option in used) <= limits.cost + 1e-9)
        )

    def complete(self, chosen: Chosen) -> bool:
        """Whether every panel that must be treated is."""
        return set(self.limits.force) <= {self.options[i].panel for i in chosen}

    def exact(self, chosen: Chosen) -> float:
        """The energy of a set, computed once."""
        key = tuple(sorted(chosen))
        if key not in self.known:
            self.known[key] = self.energy(key)
        return self.known[key]

    def sets(self, usable: list[int]) -> Iterator[Chosen]:
        """All affordable sets, the empty one first; stops a branch as soon as it costs too much."""
        stack: list[tuple[Chosen, int]] = [((), 0)]
        while stack:
            chosen, start = stack.pop()
            yield chosen
            for place in range(start, len(usable)):
                longer = (*chosen, usable[place])
                if self.affordable(longer):
                    stack.append((longer, place + 1))


def choose(options: Sequence[Option], limits: Limits, energy: Energy) -> Choice:
    """Search; `energy(chosen)` gives the band energy [Pa2] of a set of indices into `options`, () the baseline.

    Raises: CaseError where no set keeps to the limits, or none reaches the wanted gain.
    """
    search = _Search(options, limits, energy)
    usable = search.usable
    few = _counted(search, usable)
    if few:
        for chosen in search.sets(usable):
            if search.complete(chosen):
                search.exact(chosen)
        how = "every allowed set was computed"
    else:
        how = _searched(search, usable)
    return _ranked(search, how)


def _counted(search: _Search, usable: list[int]) -> bool:
    """Whether there are few enough sets to compute them all."""
    return all(number < ENUMERATED for number, _ in enumerate(search.sets(usable)))


def _searched(search: _Search, usable: list[int]) -> str:
    guess = _Pairs.of(search, usable)
    best, whole = guess.best(search)
    for chosen in [*best, *_improved(search, usable)]:
        if search.complete(chosen):
            search.exact(chosen)
    what = "the whole of it" if whole else f"its first {VISITED} branches"
    return f"singles and pairs searched by branch and bound ({what}), {len(search.known)} sets computed exactly"


@dataclass(frozen=True)
class _Pairs:
    """The guess: d_i and d_ij of the usable options, in their order."""

    usable: list[int]
    single: Floats
    pair: Floats

    @classmethod
    def of(cls, search: _Search, usable: list[int]) -> _Pairs:
        bare = search.exact(())
        single = np.array([search.exact((i,)) for i in usable]) - bare
        pair = np.zeros((len(usable), len(usable)))
        for (a, i), (b, j) in combinations(enumerate(usable), 2):
            if search.affordable((i, j)):
                pair[a, b] = pair[b, a] = search.exact((i, j)) - bare - single[a] - single[b]
        return cls(usable, single, pair)

    def best(self, search: _Search) -> tuple[list[Chosen], bool]:
        """The `KEPT` sets of lowest guess; and whether the whole tree was seen."""
        order = np.argsort(self.single)
        helpful = np.minimum(self.pair, 0.0)
        heap: list[tuple[float, Chosen]] = []
        stack: list[tuple[Chosen, Chosen, int, float]] = [((), (), 0, 0.0)]  # places, options, next, guess
        visited = 0
        while stack and visited < VISITED:
            places, chosen, start, value = stack.pop()
            visited += 1
            if len(heap) < KEPT:
                heapq.heappush(heap, (-value, chosen))
            elif value < -heap[0][0]:
                heapq.heapreplace(heap, (-value, chosen))
            rest = order[start:]
            gains = self.single[rest] + self.pair[rest][:, np.array(places, dtype=np.int64)].sum(axis=1)
            most = gains + 0.5 * helpful[np.ix_(rest, rest)].sum(axis=1)
            if len(heap) == KEPT and value + np.minimum(most, 0.0).sum() >= -heap[0][0]:
                continue
            for step in range(len(rest) - 1, -1, -1):
                longer = (*chosen, self.usable[rest[step]])
                if search.affordable(longer):
                    stack.append(((*places, int(rest[step])), longer, start + step + 1, value + float(gains[step])))
        return [chosen for _, chosen in heap], not stack


def _improved(search: _Search, usable: list[int]) -> list[Chosen]:
    """Greedy choices by gain, gain per mass and gain per cost, improved by swaps; exact energies."""
    found = []
    weights: list[Callable[[Option], float]] = [lambda o: 1.0, lambda o: o.mass, lambda o: o.cost]
    for weight in weights:
        chosen: Chosen = ()
        while True:
            now = search.exact(chosen)
            steps = [(*chosen, i) for i in usable if i not in chosen and search.affordable((*chosen, i))]
            better = [s for s in steps if search.exact(s) < now]
            if not better:
                break
            chosen = max(better, key=lambda s: (now - search.exact(s)) / max(weight(search.options[s[-1]]), 1e-9))
        found.append(_swapped(search, usable, chosen))
    return found


def _swapped(search: _Search, usable: list[int], chosen: Chosen) -> Chosen:
    """Replace one option by another, or by none, as long as that helps."""
    while True:
        now = search.exact(chosen)
        moves = [(*chosen[:k], *chosen[k + 1 :], *new) for k in range(len(chosen)) for new in ((), *((i,) for i in usable))]
        moves = [m for m in moves if len(set(m)) == len(m) and search.affordable(m)]
        best = min(moves, key=search.exact, default=chosen)
        if not search.exact(best) < now:
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
        if search.affordable(chosen) and search.complete(chosen) and set(chosen) <= set(search.usable)
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
    if not found:
        raise CaseError("no set of treatments keeps to the limits; raise one of them, or force fewer panels")
    return Choice(tuple(found), front, how)


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
