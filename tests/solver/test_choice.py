"""Choices within limits against brute force, on energies like those of panels: random pressures that interfere."""

from __future__ import annotations

import numpy as np
import pytest

from murmesh.solver import choice
from murmesh.solver.case.catalogue import Limits
from murmesh.solver.choice import choose
from murmesh.solver.errors import CaseError
from murmesh.solver.treatment import Option

PANELS, KINDS, LINES = 12, 2, 40


class Panels:
    """Pressures p_l of panels over lines; an option scales its panel's pressure and couples a little to the others."""

    def __init__(self, seed: int) -> None:
        rng = np.random.default_rng(seed)
        shape = (LINES, PANELS)
        self.pressure = rng.normal(size=shape) + 1j * rng.normal(size=shape)
        self.factor = 1 - rng.uniform(0.0, 0.9, (PANELS * KINDS, LINES)) * np.exp(
            1j * rng.normal(0, 0.6, (PANELS * KINDS, LINES))
        )
        self.side = 0.15 * (rng.normal(size=(PANELS * KINDS, LINES)) + 1j * rng.normal(size=(PANELS * KINDS, LINES)))
        area = rng.uniform(0.3, 1.5, PANELS)
        self.options = [
            Option(f"p{i}", f"t{k}", area[i], area[i] * (0.8, 2.0)[k], area[i] * (9.0, 20.0)[k], (0.02, 0.05)[k])
            for i in range(PANELS)
            for k in range(KINDS)
        ]

    def energy(self, chosen: tuple[int, ...]) -> float:
        weight = np.ones((LINES, PANELS), dtype=np.complex128)
        all_of_it = np.ones(LINES, dtype=np.complex128)
        for i in chosen:
            weight[:, i // KINDS] *= self.factor[i]
            all_of_it *= 1 + self.side[i]
        return float(np.sum(np.abs((weight * self.pressure).sum(axis=1) * all_of_it) ** 2))


def _all(panels: Panels, limits: Limits) -> float:
    """The best gain over every allowed set, by the enumeration itself."""
    search = choice._Search(panels.options, limits, panels.energy)
    best = min(panels.energy(chosen) for chosen in search.sets(search.usable))
    return 10 * np.log10(panels.energy(()) / best)


def test_twenty_budgets_against_brute_force(monkeypatch: pytest.MonkeyPatch) -> None:
    """12 panels, two treatments each, at most three chosen; no set is enumerated by the search itself."""
    monkeypatch.setattr(choice, "ENUMERATED", 0)
    monkeypatch.setattr(choice, "KEPT", 60)
    parts = []
    for number in range(20):
        panels = Panels(number % 5)
        limits = Limits(mass=1.5 + 0.3 * number, cost=30.0 + 4 * number, panels=3)
        found = choose(panels.options, limits, panels.energy)
        assert "branch and bound" in found.how
        parts.append(found.candidates[0].gain / _all(panels, limits))
    assert np.mean(parts) >= 0.98 and min(parts) >= 0.96, np.round(parts, 3)


def test_few_sets_are_enumerated() -> None:
    panels = Panels(3)
    found = choose(panels.options[:6], Limits(panels=2), panels.energy)
    assert found.how == "every allowed set was computed"
    assert found.candidates[0].gain == max(c.gain for c in found.candidates)


def test_limits_are_kept() -> None:
    panels = Panels(1)
    limits = Limits(mass=4.0, cost=60.0, panels=4, thickness=0.03, exclude=("p1*",), force=("p3",))
    for candidate in choose(panels.options, limits, panels.energy).candidates[:50]:
        used = [panels.options[i] for i in candidate.chosen]
        assert candidate.mass <= 4.0 and candidate.cost <= 60.0 and len(used) <= 4
        assert all(o.thickness <= 0.03 and not o.panel.startswith("p1") for o in used)
        assert "p3" in {o.panel for o in used} and len({o.panel for o in used}) == len(used)


def test_the_least_cost_for_a_wanted_gain() -> None:
    panels = Panels(2)
    found = choose(panels.options, Limits(panels=3, wanted_gain=1.2), panels.energy)
    best = found.candidates[0]
    assert best.gain >= 1.2 and best.cost == min(c.cost for c in found.candidates)
    search = choice._Search(panels.options, Limits(panels=3), panels.energy)
    bare = panels.energy(())
    least = min(
        sum(panels.options[i].cost for i in chosen)
        for chosen in search.sets(search.usable)
        if 10 * np.log10(bare / panels.energy(chosen)) >= 1.2
    )
    assert best.cost <= 1.25 * least
    with pytest.raises(CaseError, match=r"gains 60 dB; the best gains \d"):
        choose(panels.options, Limits(panels=3, wanted_gain=60.0), panels.energy)


def test_the_front_holds_what_nothing_beats() -> None:
    panels = Panels(4)
    front = choose(panels.options, Limits(panels=3), panels.energy).front
    assert front[0].chosen == () and len(front) > 3
    gains = [c.gain for c in front if c.mass <= max(x.mass for x in front)]
    assert max(gains) == max(c.gain for c in front)
    for a in front:
        assert not any(b.gain > a.gain and b.mass < a.mass and b.cost < a.cost for b in front)


def test_impossible_limits_say_so() -> None:
    panels = Panels(0)
    with pytest.raises(CaseError, match="must be treated, but no treatment may go on it"):
        choose(panels.options, Limits(force=("roof",)), panels.energy)
    with pytest.raises(CaseError, match="no set of treatments keeps to the limits"):
        choose(panels.options, Limits(mass=0.01, force=("p1",)), panels.energy)
