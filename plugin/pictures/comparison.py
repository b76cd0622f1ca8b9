"""Two results in one chart: third octaves before and after per receiver, the changes beside them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from murmesh.plugin.compare import Comparison, Pair
from murmesh.plugin.describe import CONVENTION, WEIGHTING, level_unit, names, origin, signed
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.pictures.style import INK, LINES, look, page, save

_ROW, _HEADING, _UNDER = 2.5, 0.42, 0.72  # inches: axes, room above and below them
_RANGE = 50.0


@PICTURES.member("comparison", ".png", "two results: levels before and after, and the changes", source="comparison")
def draw(found: Comparison, path: Path) -> Path:
    """Draw a row per receiver and load case."""
    with look():
        return save(figure(found), path)


def figure(found: Comparison) -> Figure:
    """The figure, for further work."""
    changed = [change.where for change in found.changes]
    facts = [
        f"{WEIGHTING[found.weighting]} · changes are after minus before",
        f"changed in the case: {names(changed, 3) or 'nothing'}",
    ]
    notes = [
        *found.left_out,
        f"Convention: {CONVENTION}.",
        f"Before: {origin(found.before)}.",
        f"After: {origin(found.after)}.",
    ]
    room = _HEADING + _ROW + _UNDER
    sheet = page("Before and after", facts, notes, len(found.pairs) * room)
    top = _top(found)
    for i, pair in enumerate(found.pairs):
        up = (len(found.pairs) - 1 - i) * room + _UNDER
        _levels(sheet.axes(0.85, up, 7.0, _ROW), pair, top, legend=i == 0)
        _changes(sheet.axes(8.85, up, sheet.width - 8.85, _ROW), pair)
    return sheet.figure


def _top(found: Comparison) -> float:
    heard = [v for pair in found.pairs for _, *both in pair.rows() for v in both[:2] if np.isfinite(v)]
    return float(5.0 * np.ceil(max(heard, default=0.0) / 5.0) + 5.0)


def _levels(axes: Axes, pair: Pair, top: float, *, legend: bool) -> None:
    rows = list(pair.rows())
    at = np.arange(len(rows))
    for k, (label, hatch, colour) in enumerate((("before", "", "#c3ced8"), ("after", "////", "white"))):
        heights = np.array([row[1 + k] for row in rows])
        shown = np.where(np.isfinite(heights), np.maximum(heights - (top - _RANGE), 0.0), 0.0)
        axes.bar(at + 0.4 * (k - 0.5), shown, 0.38, bottom=top - _RANGE, facecolor=colour, edgecolor=LINES[0][0],
                 hatch=hatch, linewidth=0.9, label=label)  # fmt: skip
    axes.set_xticks(at, [row[0].removesuffix(" Hz") for row in rows], fontsize=9)
    axes.set_ylim(top - _RANGE, top)
    axes.grid(True, axis="y")
    axes.set_axisbelow(True)
    axes.set_xlabel("overall, and third octaves [Hz]")
    axes.set_ylabel(f"level [{level_unit(pair.before.weighting, power=pair.before.power)}]", fontsize=9.5)
    axes.set_title(f"{pair.receiver}, {pair.load_case} ({pair.before.spectrum})", loc="left", fontweight="bold", fontsize=12)
    if legend:
        axes.legend(loc="upper right", ncols=2, bbox_to_anchor=(1.0, 1.17), borderaxespad=0.0)


def _changes(axes: Axes, pair: Pair) -> None:
    """Dots on stems, filled where it gets louder."""
    rows = list(pair.rows())
    values = np.array([row[3] for row in rows])
    largest = max(float(np.nanmax(np.abs(values), initial=0.0)), 1.0) * 1.45
    for i, value in enumerate(values):
        if np.isfinite(value):
            axes.vlines(i, 0.0, value, color=LINES[0][0], linewidth=1.4)
            axes.plot(i, value, "o", color=LINES[0][0], markerfacecolor=LINES[0][0] if value > 0 else "white", markersize=6)
            axes.annotate(signed(float(value)), (i, value), (0, 7 if value > 0 else -7), textcoords="offset points",
                          ha="center", va="bottom" if value > 0 else "top", fontsize=8.5, color=INK)  # fmt: skip
    axes.axhline(0.0, color=INK, linewidth=0.9)
    axes.set_xticks(range(len(rows)), [row[0].removesuffix(" Hz") for row in rows], fontsize=9, rotation=90)
    axes.set_xlim(-0.6, len(rows) - 0.4)
    axes.set_ylim(-largest, largest)
    axes.grid(True, axis="y")
    axes.set_axisbelow(True)
    axes.set_ylabel("change [dB]", fontsize=9.5)
    axes.set_title("change (filled: louder)", loc="left", fontsize=11)
