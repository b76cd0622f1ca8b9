"""Quieten and treat side by side: what lowering a panel's velocity brings, and what a treatment on it brings."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from murmesh.plugin.describe import CONVENTION, level_unit, origin, short, signed
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.pictures.study_facts import goal_facts
from murmesh.plugin.pictures.style import ACCENT, INK, LINES, look, page, save
from murmesh.plugin.study import QUIETER, Measure, Study

_DRAWN = "Dark lines: the middle 80 % of the draws of what is not known. "
_BAR, _MOST = 0.3, 24  # inches per bar, bars at most


@PICTURES.member("two_rankings", ".png", "gains of quietening and of treating the panels, side by side", source="study")
def draw(study: Study, path: Path) -> Path:
    """Draw both rankings."""
    with look():
        return save(figure(study), path)


def figure(study: Study) -> Figure:
    """The figure, for further work."""
    left, right = study.quieten[:_MOST], study.treat[:_MOST]
    height = _BAR * max(len(left), len(right)) + 1.2
    notes = [
        f"Quieten: the panel's velocity lowered by {QUIETER:g} dB and nothing else. Treat: computed with the treatment "
        "in place for every bar. The two answer different questions and are not to be mixed.",
        f"Hatched bars make it louder. {_DRAWN if study.spread else ''}{study.words}",
        f"Convention: {CONVENTION}. {origin(study.result)}.",
    ]
    sheet = page("What quietening and what treating would bring", goal_facts(study), notes, height)
    unit = level_unit(study.goal.weighting).split(" re ")[0]
    half = sheet.width / 2
    gains = np.array([gain for m in (*left, *right) for gain in (m.gain, *(m.spread or ()))])
    scale = min(0.0, 1.15 * float(gains.min(initial=0.0))), 1.2 * max(float(gains.max(initial=0.0)), 0.1)
    for at, measures, title in ((1.9, left, "quieten"), (half + 2.6, right, "treat")):
        width = half - 3.1
        axes = sheet.axes(at, height - 0.45 - _BAR * len(measures), width, _BAR * len(measures))
        _bars(axes, measures, f"{title}: gain [{unit}]", scale)
    return sheet.figure


def _bars(axes: Axes, measures: Sequence[Measure], label: str, scale: tuple[float, float]) -> None:
    for i, m in enumerate(measures):
        face, hatch = ("white", "////") if m.louder else (LINES[0][0], "")
        axes.barh(i, m.gain, 0.66, facecolor=face, edgecolor=ACCENT if m.louder else LINES[0][0], hatch=hatch, linewidth=0.9)
        if m.spread:
            axes.hlines(i, *m.spread, color=INK, linewidth=1.4)
        end = max(m.gain, 0.0, *(m.spread or ()))
        axes.annotate(signed(float(m.gain), digits=2), (end, i), (4, 0), textcoords="offset points", va="center", fontsize=9)
    axes.set_yticks(range(len(measures)), [short(m.name, 32) for m in measures], fontsize=9.5)
    axes.set_ylim(len(measures) - 0.5, -0.5)
    axes.set_xlim(*scale)  # one scale for both rankings: a decibel is as long in either
    axes.axvline(0, color=INK, linewidth=1.0)
    axes.grid(True, axis="x")
    axes.set_axisbelow(True)
    axes.tick_params(axis="y", length=0)
    axes.spines["left"].set_visible(False)
    axes.set_title(label, loc="left", fontsize=11.5, fontweight="bold")
