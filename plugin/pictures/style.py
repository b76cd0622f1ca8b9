"""How every picture looks: one page with its facts above and its conventions below, one colour map per meaning.

Levels are drawn with cividis (Nunez, Anderton & Renslow, PLoS ONE 13 (2018) e0199239), perceptually uniform and alike
for readers with and without colour-vision deficiency; signed quantities with purple-orange (PuOr: Brewer's diverging
schemes, safe for the same readers), zero in the middle. Lines differ in their dashes as well as in their colours.
"""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Literal

import matplotlib
import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Normalize
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.text import Text

from murmesh.plugin.files import written
from murmesh.solver.levels import octaves, third_octaves

Floats = npt.NDArray[np.float64]

WIDTH, DPI = 14.0, 100  # inches, dots per inch: 1400 px
INK, QUIET, HAIR, ACCENT = "#1f2a30", "#56646c", "#c9d0d3", "#a3421f"
LEVEL_MAP, SIGNED_MAP, GAIN_MAP = "cividis", "PuOr_r", "PuOr"  # orange is what makes it louder, in shares and in gains
RANGE_DB = 40.0
LINES = (("#1f4e79", "-"), ("#c8641e", (0, (6, 2))), ("#2f7d5b", (0, (1.5, 1.5))), ("#7a4b94", (0, (6, 2, 1.5, 2))))
"""Colour and dashes of the first, second, ... curve in one chart."""

_RC: Any = {
    "font.family": "DejaVu Sans",  # comes with matplotlib
    "font.size": 10.5,
    "text.color": INK,
    "axes.edgecolor": QUIET,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.8,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "xtick.color": QUIET,
    "ytick.color": QUIET,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "grid.color": HAIR,
    "grid.linewidth": 0.6,
    "hatch.linewidth": 0.7,
    "legend.frameon": False,
}
_TITLE, _FACTS, _NOTES = 17.0, 11.5, 9.5  # points
_LINE = {size: 1.45 * size / 72 for size in (_TITLE, _FACTS, _NOTES)}  # inches per line
_MARGIN, _GAP = 0.32, 0.14  # inches
_MOST_TICKS = 16
_NOTE_LETTERS = 196  # per line at the size of notes


def look() -> AbstractContextManager[None]:
    """The settings under which every picture is made, kept apart from the user's own."""
    return matplotlib.rc_context(_RC)


@dataclass(frozen=True, eq=False)
class Page:
    """A figure with its words in place; the free part is (left, bottom, right, top) in inches."""

    figure: Figure
    left: float
    bottom: float
    right: float
    top: float

    def axes(self, left: float, bottom: float, width: float, height: float, **kind: Any) -> Axes:
        """Axes at a place in inches from the lower left corner of the free part; `kind` as matplotlib's `add_axes`."""
        w, h = self.figure.get_size_inches()
        return self.figure.add_axes(((self.left + left) / w, (self.bottom + bottom) / h, width / w, height / h), **kind)

    def write(self, text: str, left: float, bottom: float, **style: Any) -> None:
        """Words at a place in inches from the lower left corner of the free part."""
        w, h = self.figure.get_size_inches()
        self.figure.text((self.left + left) / w, (self.bottom + bottom) / h, text, **style)

    def narrowed(self, inches: float) -> Page:
        """The same page with less free width, from the right."""
        return replace(self, right=self.right - inches)

    @staticmethod
    def full_width() -> float:
        """Free width of every page, inches."""
        return WIDTH - 2 * _MARGIN

    @property
    def width(self) -> float:
        return self.right - self.left

    @property
    def height(self) -> float:
        return self.top - self.bottom


def page(title: str, facts: Sequence[str], notes: Sequence[str], height: float) -> Page:
    """A page 1400 px wide: title and facts above, notes below, `height` inches free between them."""
    wrapped = [line for note in notes for line in textwrap.wrap(note, _NOTE_LETTERS)]
    head = _MARGIN + _LINE[_TITLE] + len(facts) * _LINE[_FACTS] + _GAP
    foot = _MARGIN + len(wrapped) * _LINE[_NOTES] + 2 * _GAP
    total = head + height + foot
    figure = Figure(figsize=(WIDTH, total), dpi=DPI, facecolor="white")
    FigureCanvasAgg(figure)

    def put(text: str, down: float, **style: Any) -> None:
        figure.text(_MARGIN / WIDTH, 1 - down / total, text, va="top", **style)

    put(title, _MARGIN, fontsize=_TITLE, fontweight="bold")
    for i, fact in enumerate(facts):
        put(fact, _MARGIN + _LINE[_TITLE] + i * _LINE[_FACTS], fontsize=_FACTS, color=QUIET)
    for i, note in enumerate(wrapped):
        put(note, total - foot + 2 * _GAP + i * _LINE[_NOTES], fontsize=_NOTES, color=QUIET)
    rule = [1 - (total - foot + _GAP) / total] * 2
    figure.add_artist(Line2D([_MARGIN / WIDTH, 1 - _MARGIN / WIDTH], rule, color=HAIR, linewidth=0.8))
    return Page(figure, _MARGIN, foot, WIDTH - _MARGIN, foot + height)


def save(figure: Figure, path: Path) -> Path:
    """Write the PNG."""
    with written(path) as scratch, look():
        figure.savefig(scratch, dpi=DPI, format="png")
    return Path(path)


def texts(figure: Figure) -> list[str]:
    """Everything that is written on a figure."""
    return [text.get_text() for text in figure.findobj(Text) if text.get_visible() and text.get_text()]


def level_limits(levels: Floats, limits: tuple[float, float] | None = None) -> tuple[float, float]:
    """The limits of a level scale: those given, else 40 dB below the highest level rounded up to 5 dB."""
    if limits is not None:
        return limits
    finite = levels[np.isfinite(levels)]
    top = 5.0 * np.ceil(float(finite.max()) / 5.0) if len(finite) else 0.0
    return top - RANGE_DB, top


def colour_bar(
    axes: Axes,
    limits: tuple[float, float],
    label: str,
    *,
    colours: str = LEVEL_MAP,
    step: float = 5.0,
    upright: bool = True,
) -> None:
    """A colour bar that fills `axes`, with arrows where the scale clips what it shows."""
    mappable = ScalarMappable(Normalize(*limits), matplotlib.colormaps[colours])
    way: Literal["vertical", "horizontal"] = "vertical" if upright else "horizontal"
    bar = axes.figure.colorbar(mappable, cax=axes, extend="both", orientation=way)
    bar.set_ticks(np.arange(np.ceil(limits[0] / step) * step, limits[1] + step / 1e3, step).tolist())
    bar.outline.set_edgecolor(QUIET)
    bar.set_label(label)


def frequency_axis(axes: Axes, low: float, high: float) -> None:
    """A logarithmic axis of frequency, ticked at nominal third octaves (or octaves); a linear one over a short range."""
    axes.set_xlim(low, high)
    if high < 1.6 * low:
        return
    axes.set_xscale("log")
    bands = third_octaves(low, high)
    bands = octaves(low, high) if len(bands) > _MOST_TICKS else bands
    inside = [(float(b.nominal), b.nominal) for b in bands if low <= float(b.nominal) <= high]
    axes.set_xticks([at for at, _ in inside], [name for _, name in inside])
    axes.set_xticks([], minor=True)
