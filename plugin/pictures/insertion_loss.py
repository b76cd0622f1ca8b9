"""Insertion loss between two results: line by line and per third octave, a row per place and load case."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from murmesh.plugin.compare import Comparison, Pair
from murmesh.plugin.describe import CONVENTION, WEIGHTING, origin, signed
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.pictures.style import ACCENT, INK, LINES, frequency_axis, look, page, save
from murmesh.solver.errors import ResultError

Floats = npt.NDArray[np.float64]
_ROW, _HEADING, _UNDER = 2.3, 0.42, 0.72  # inches: axes, room above and below them


@PICTURES.member("insertion_loss", ".png", "two results: insertion loss at every place", source="comparison")
def draw(found: Comparison, path: Path) -> Path:
    """Draw a row per place and load case. Raises ResultError where the two sweeps differ."""
    with look():
        return save(figure(found), path)


def figure(found: Comparison) -> Figure:
    """The figure, for further work."""
    pairs = [pair for pair in found.pairs if pair.loss is not None]
    if not pairs:
        raise ResultError("the two sweeps differ, so there is no insertion loss line by line; solve both on the same lines")
    facts = [f"{WEIGHTING[found.weighting]} where bands are added up · before less after: positive is quieter"]
    notes = [
        "Thin: lines. Thick steps: third octaves, from band energies. One scale for all rows.",
        f"Convention: {CONVENTION}.",
        f"Before: {origin(found.before)}.",
        f"After: {origin(found.after)}.",
    ]
    room = _HEADING + _ROW + _UNDER
    sheet = page("Insertion loss", facts, notes, len(pairs) * room)
    values = np.concatenate([pair.loss[np.isfinite(pair.loss)] for pair in pairs if pair.loss is not None])
    low, high = (float(edge(values, initial=0.0)) for edge in (np.min, np.max))
    for i, pair in enumerate(pairs):
        up = (len(pairs) - 1 - i) * room + _UNDER
        axes = sheet.axes(0.85, up, sheet.width - 0.85, _ROW)
        _row(axes, pair, found.before.frequencies)
        axes.set_ylim(min(1.1 * low, -1.0), max(1.1 * high, 3.0))
    return sheet.figure


def _row(axes: Axes, pair: Pair, f: Floats) -> None:
    assert pair.loss is not None
    heard = np.isfinite(pair.loss)
    axes.plot(f[heard], pair.loss[heard], "." if heard.sum() < 40 else "-", color=LINES[0][0], linewidth=1.2, label="lines")
    for i, band in enumerate(pair.bands):
        change = list(pair.rows())[1 + i][3]
        if np.isfinite(change):
            low, high = max(band.lower, float(f[0])), min(band.upper, float(f[-1]))
            axes.hlines(-change, low, high, color=ACCENT, linewidth=2.6, label="third octaves" if i == 0 else "")
    frequency_axis(axes, *((float(f[0]), float(f[-1])) if len(f) > 1 else (0.8 * float(f[0]), 1.25 * float(f[0]))))
    axes.axhline(0.0, color=INK, linewidth=0.9)
    axes.grid(True)
    axes.set_xlabel("frequency [Hz]")
    axes.set_ylabel("insertion loss [dB]", fontsize=9.5)
    overall = signed(-pair.overall_change) if np.isfinite(pair.overall_change) else "-"
    axes.set_title(
        f"{pair.receiver}, {pair.load_case} ({pair.before.spectrum}): {overall} dB over all", loc="left", fontweight="bold",
        fontsize=12,
    )  # fmt: skip
    axes.legend(loc="upper right", ncols=2, bbox_to_anchor=(1.0, 1.17), borderaxespad=0.0)
