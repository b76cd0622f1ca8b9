"""Choices within limits against brute force, on a cavity in its modes, whose panels interfere as those of a cab."""

from __future__ import annotations

import numpy as np
import pytest

from modal_cavity import Cavity
from murmesh.solver import choice
from murmesh.solver.case.catalogue import Limits
from murmesh.solver.choice import choose
from murmesh.solver.errors import CaseError


def test_twenty_budgets_against_brute_force(monkeypatch: pytest.MonkeyPatch) -> None:
    """12 panels, two treatments each, at most three chosen; the search enumerates nothing and computes few sets exactly."""
    monkeypatch.setattr(choice, "ENUMERATED", 0)
    monkeypatch.setattr(choice, "KEPT", 20)
    parts, costs = [], []
    for number in range(20):
        cavity = Cavity(number % 5)
        limits = Limits(mass=1.5 + 0.3 * number, cost=25.0 + 4 * number, panels=3)
        gains = cavity.enumerated(limits)
        found = choose(cavity.options, limits, cavity.energy)
        assert "branch and bound" in found.how
        parts.append(found.candidates[0].gain / max(gains.values()))
        wanted = 0.7 * max(gains.values())
        cheapest = choose(cavity.options, limits.with_(wanted_gain=wanted), cavity.energy).candidates[0]
        least = min(sum(cavity.options[i].cost for i in chosen) for chosen, gain in gains.items() if gain >= wanted)
        costs.append(cheapest.cost / least)
    assert np.mean(parts) >= 0.98 and min(parts) >= 0.96 and max(parts) < 1 + 1e-9, np.round(parts, 3)
    assert np.mean(costs) <= 1.01 and max(costs) <= 1.04 and min(costs) > 1 - 1e-9, np.round(costs, 3)


def test_branch_and_bound_finds_what_the_guess_thinks_best(monkeypatch: pytest.MonkeyPatch) -> None:
    """Cutting branches loses none of the guess's best sets, for energy and for cost."""
    monkeypatch.setattr(choice, "KEPT", 12)
    cavity = Cavity(3)
    light = Limits(mass=5.0, panels=3)
    for limits in (light, light.with_(wanted_gain=0.4), Limits(panels=3, force=("panel_06",))):
        search = choice._Search(cavity.options, limits, cavity.energy)
        guess = choice._Pairs.of(search)
        best, whole = guess.best(search)
        bare = cavity.energy(())
        worth = {tuple(sorted(s)): search.worth(bare + guess._of(s), s, choice.SLACK) for s in search.sets()}
        assert whole and len(worth) > 200
        np.testing.assert_allclose(sorted(worth[tuple(sorted(s))] for s in best), sorted(worth.values())[:12], rtol=1e-9)


def test_few_sets_are_enumerated() -> None:
    cavity = Cavity(3)
    found = choose(cavity.options[:6], Limits(panels=2), cavity.energy)
    assert found.how.startswith("every allowed set was computed") and len(found.candidates) == 1 + 6 + 3 * 4
    assert found.candidates[0].gain == max(c.gain for c in found.candidates)


@pytest.mark.parametrize("enumerated", [0, 400])
def test_limits_are_kept(enumerated: int, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(choice, "ENUMERATED", enumerated)
    cavity = Cavity(1)
    limits = Limits(mass=4.0, cost=60.0, panels=4, thickness=0.03, exclude=("panel_1*",), force=("panel_03", "panel_09"))
    found = choose(cavity.options, limits, cavity.energy)
    assert found.candidates
    for candidate in (*found.candidates, *found.front):
        used = [cavity.options[i] for i in candidate.chosen]
        assert candidate.mass <= 4.0 and candidate.cost <= 60.0 and len(used) <= 4
        assert all(o.thickness <= 0.03 and not o.panel.startswith("panel_1") for o in used)
        assert {"panel_03", "panel_09"} <= {o.panel for o in used} and len({o.panel for o in used}) == len(used)


def test_a_panel_is_treated_by_force_although_it_becomes_louder(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(choice, "ENUMERATED", 0)
    monkeypatch.setattr(choice, "KEPT", 5)
    cavity = Cavity(0)
    worst = min(range(24), key=lambda i: -cavity.energy((i,)))
    panel = cavity.options[worst].panel
    found = choose(cavity.options, Limits(panels=3, force=(panel,)), cavity.energy)
    assert all(panel in {cavity.options[i].panel for i in c.chosen} for c in found.candidates)
    bare = cavity.energy(())
    best = max(
        10 * np.log10(bare / cavity.energy(chosen))
        for chosen in cavity.enumerated(Limits())
        if panel in {cavity.options[i].panel for i in chosen}
    )
    assert found.candidates[0].gain >= 0.96 * best


def test_nothing_is_chosen_where_everything_makes_it_louder() -> None:
    cavity = Cavity(0)
    louder = [o for i, o in enumerate(cavity.options) if cavity.energy((i,)) > 1.01 * cavity.energy(())][:3]
    assert len(louder) == 3
    places = [cavity.options.index(option) for option in louder]
    found = choose(louder, Limits(panels=1), lambda chosen: cavity.energy(tuple(places[i] for i in chosen)))
    assert found.candidates[0].chosen == () and found.candidates[-1].gain < 0


def test_a_wanted_gain_out_of_reach_says_what_can_be_had() -> None:
    cavity = Cavity(2)
    with pytest.raises(CaseError, match=r"gains 60 dB; the best gains \d\.\d+ dB: raise a limit"):
        choose(cavity.options, Limits(panels=3, wanted_gain=60.0), cavity.energy)


def test_the_front_holds_what_nothing_beats() -> None:
    cavity = Cavity(4)
    found = choose(cavity.options, Limits(panels=3), cavity.energy)
    front = found.front
    assert front[0].chosen == () and len(front) > 5
    assert max(c.gain for c in front) == found.candidates[0].gain
    for a in front:
        assert not any(b.gain > a.gain and b.mass < a.mass and b.cost < a.cost for b in found.candidates)
    for c in found.candidates:  # and everything else is beaten, or equalled
        assert any(a.gain >= c.gain and a.mass <= c.mass and a.cost <= c.cost for a in front)


@pytest.mark.parametrize(
    ("limits", "message"),
    [
        (Limits(force=("ceiling",)), "'ceiling' must be treated, but no treatment may go on it; widen"),
        (Limits(mass=0.01, force=("panel_01",)), "'panel_01' must be treated, but no set of treatments keeps to the limits"),
        (Limits(exclude=("panel_*",), force=("panel_01",)), "it is excluded, or every treatment of it alone is too heavy"),
        (Limits(panels=1, force=("panel_01", "panel_02")), "raise one of them, or force fewer panels"),
    ],
)
def test_impossible_limits_say_so(limits: Limits, message: str) -> None:
    cavity = Cavity(0)
    with pytest.raises(CaseError, match=message):
        choose(cavity.options, limits, cavity.energy)
