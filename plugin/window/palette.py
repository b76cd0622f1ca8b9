"""The colour of every boundary kind, and the legend that says so. A kind added later takes the next free colour."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable
from pathlib import Path

from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle

from murmesh.plugin.pictures.style import ACCENT, HAIR, INK, LINES, QUIET, look
from murmesh.plugin.window.state import NO_KIND
from murmesh.solver.case.boundary import Boundary

_SHADES = (QUIET, LINES[1][0], LINES[0][0], LINES[2][0], ACCENT, LINES[3][0], "#c9a227", "#3d8f97", "#8a6d52", "#b05c87")
_ROW, _WIDTH = 22, 230  # pixels
_DPI = 100


def colour(kind: str) -> str:
    """The colour of a boundary kind, #rrggbb; a light grey where there is none."""
    kinds = list(Boundary.registry)
    return _SHADES[kinds.index(kind) % len(_SHADES)] if kind in kinds else HAIR


def channels(kind: str) -> tuple[int, int, int]:
    """Red, green and blue, 0..255."""
    text = colour(kind)
    red, green, blue = (int(text[i : i + 2], 16) for i in (1, 3, 5))
    return red, green, blue


def legend_lines(kinds: Iterable[str]) -> list[tuple[str, str]]:
    """(kind, words) of every kind in use, in the order of their declaration; surfaces without a kind last."""
    counts = Counter(kinds)
    used = [kind for kind in Boundary.registry if counts[kind]]
    lines = [(kind, f"{kind.replace('_', ' ')} ({counts[kind]})") for kind in used]
    return [*lines, (NO_KIND, f"no boundary kind ({counts[NO_KIND]})")] if counts[NO_KIND] else lines


def draw_legend(kinds: Iterable[str], path: Path) -> tuple[int, int]:
    """Write the legend as a PNG; its width and height in pixels."""
    lines = legend_lines(kinds)
    width, height = _WIDTH, _ROW * len(lines) + 8
    with look():
        figure = Figure(figsize=(width / _DPI, height / _DPI), dpi=_DPI, facecolor="white")
        FigureCanvasAgg(figure)
        for number, (kind, words) in enumerate(lines):
            middle = 1 - (4 + _ROW * (number + 0.5)) / height
            low = middle - 7 / height
            swatch = Rectangle((8 / width, low), 14 / width, 14 / height, facecolor=colour(kind), edgecolor=INK, linewidth=0.6)
            figure.add_artist(swatch)
            figure.text(30 / width, middle, words, va="center", fontsize=9.5)
        figure.savefig(path, dpi=_DPI, format="png")
    return width, height
