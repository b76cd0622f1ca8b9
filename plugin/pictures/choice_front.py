"""What a dB costs: the sets of treatments that no other beats in gain, mass and cost."""

from __future__ import annotations

from pathlib import Path

from matplotlib.axes import Axes
from matplotlib.figure import Figure

from murmesh.plugin.describe import CONVENTION, level_unit, origin
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.pictures.study_facts import goal_facts
from murmesh.plugin.pictures.style import ACCENT, LINES, QUIET, look, page, save
from murmesh.plugin.study import Study
from murmesh.solver.choice import Candidate

_HEIGHT = 4.6


@PICTURES.member("choice_front", ".png", "gain against cost and mass of the best sets of treatments", source="study")
def draw(study: Study, path: Path) -> Path:
    """Draw gain against cost and against mass."""
    with look():
        return save(figure(study), path)


def figure(study: Study) -> Figure:
    """The figure, for further work."""
    best = study.best
    names = " + ".join(option.name for option in study.used(best)) or "nothing"
    notes = [
        f"Filled dots: sets that no other beats in gain, mass and cost at once. Ring: the choice, {names}.",
        f"How it was found: {study.choice.how}.",
        "Vertical lines: the limits. Prices and masses are those of the catalogue.",
        f"Convention: {CONVENTION}. {origin(study.result)}.",
    ]
    sheet = page("What a decibel costs", goal_facts(study), notes, _HEIGHT)
    width = sheet.width / 2 - 1.0
    unit = level_unit(study.goal.weighting).split(" re ")[0]
    for left, what, label, limit in (
        (0.8, "cost", "cost [EUR]", study.limits.cost),
        (sheet.width / 2 + 0.8, "mass", "added mass [kg]", study.limits.mass),
    ):
        axes = sheet.axes(left, 0.7, width, _HEIGHT - 1.1)
        _dots(axes, study.choice.candidates, study.choice.front, best, what)
        if limit is not None:
            axes.axvline(limit, color=ACCENT, linestyle=(0, (6, 3)), linewidth=1.2)
            axes.set_xlim(right=max(axes.get_xlim()[1], 1.06 * limit))
            axes.annotate("limit", (limit, 0), (-5, 6), xycoords=("data", "axes fraction"), textcoords="offset points",
                          ha="right", rotation=90, color=ACCENT, fontsize=9.5)  # fmt: skip
        axes.set_xlabel(label)
        axes.set_ylabel(f"gain [{unit}]")
        axes.grid(True)
        axes.set_axisbelow(True)
    return sheet.figure


def _dots(axes: Axes, every: tuple[Candidate, ...], front: tuple[Candidate, ...], best: Candidate, what: str) -> None:
    axes.plot([getattr(c, what) for c in every], [c.gain for c in every], ".", color=QUIET, markersize=3, alpha=0.5)
    axes.plot([getattr(c, what) for c in front], [c.gain for c in front], "o", color=LINES[0][0], markersize=5)
    axes.plot([getattr(best, what)], [best.gain], "o", markerfacecolor="none", markeredgecolor=ACCENT, markersize=14,
              markeredgewidth=2)  # fmt: skip
    axes.set_xlim(left=0)
