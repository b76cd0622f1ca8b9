"""Transmission loss of a duct between two ports, over frequency."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

from murmesh.plugin.describe import CONVENTION, band_words, origin
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.pictures.style import ACCENT, HAIR, INK, LINES, frequency_axis, look, page, save
from murmesh.plugin.transmission import REMARK, Transmission

_ROW, _UNDER = 3.4, 0.72  # inches: axes, room below them


@PICTURES.member("transmission_loss", ".png", "transmission loss between two ports", source="transmission")
def draw(found: Transmission, path: Path) -> Path:
    """Draw the curve."""
    with look():
        return save(figure(found), path)


def figure(found: Transmission) -> Figure:
    """The figure, for further work."""
    f = found.result.frequencies
    facts = [f"from {found.inlet} to {found.outlet} · {band_words((float(f[0]), float(f[-1])))} · {found.limit}"]
    notes = [
        REMARK,
        *(["Hatched: above the first cut-on, a guess."] if found.cut_on < f[-1] else []),
        f"Convention: {CONVENTION}. {origin(found.result)}.",
    ]
    sheet = page("Transmission loss", facts, notes, _ROW + _UNDER)
    axes = sheet.axes(0.85, _UNDER, sheet.width - 0.85, _ROW)
    passed = np.isfinite(found.loss)
    axes.plot(f[passed], found.loss[passed], "o" if len(f) < 40 else "-", color=LINES[0][0], linewidth=1.5, markersize=4.5)
    frequency_axis(axes, *((float(f[0]), float(f[-1])) if len(f) > 1 else (0.8 * float(f[0]), 1.25 * float(f[0]))))
    axes.set_ylim(-1.0, max(1.1 * float(np.max(found.loss[passed], initial=0.0)), 5.0))
    axes.axhline(0.0, color=INK, linewidth=0.9)
    if found.cut_on < f[-1]:
        axes.axvspan(max(found.cut_on, f[0]), f[-1], facecolor="none", edgecolor=HAIR, hatch="//", linewidth=0.0)
        axes.axvline(max(found.cut_on, f[0]), color=ACCENT, linestyle="--", linewidth=1.3)
    axes.grid(True)
    axes.set_xlabel("frequency [Hz]")
    axes.set_ylabel("transmission loss [dB]")
    return sheet.figure
