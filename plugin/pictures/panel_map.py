"""Frequency x panel: where in the spectrum each panel raises or lowers the level, under the total spectrum.

Shown is the level of a panel's share of the mean square, with the share's sign: strong colours stand only where the panel
matters to the level, not in the dips of the spectrum.
"""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import matplotlib
import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Normalize
from matplotlib.figure import Figure

from murmesh.plugin.describe import (
    CONVENTION,
    WEIGHTING,
    band_words,
    is_density,
    level_unit,
    load_case_words,
    names,
    origin,
    short,
)
from murmesh.plugin.fields import listed_receivers
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.pictures.style import LINES, QUIET, SIGNED_MAP, frequency_axis, level_limits, look, page, save
from murmesh.solver.contribution import QUIETENING, participation
from murmesh.solver.errors import ResultError
from murmesh.solver.levels import level
from murmesh.solver.levels import weighting as weighting_db
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]
_ROW, _SPECTRUM, _NAMES, _BAR = 0.29, 1.7, 2.1, 1.55  # inches: a panel, the spectrum, room for names, for the colour bar


@PICTURES.member("panel_map", ".png", "frequency x panel map of signed share levels, with the total spectrum")
def draw(
    result: Result,
    path: Path,
    *,
    receivers: tuple[str, ...] = (),
    load_case: str = "",
    weighting: str = "A",
    limits: tuple[float, float] | None = None,
) -> Path:
    """Draw the map averaged over `receivers` (none: all); `limits` [dB] of the level scale."""
    with look():
        return save(figure(result, receivers, load_case, weighting, limits), path)


def figure(
    result: Result,
    receivers: Sequence[str] = (),
    load_case: str = "",
    weighting: str = "A",
    limits: tuple[float, float] | None = None,
) -> Figure:
    """The figure, for further work."""
    listed = listed_receivers(result, receivers)
    density = is_density(result, load_case)
    lines, shares, total, panels = _shares(result, listed, load_case, weighting)
    scale = level_limits(np.asarray(level(total)), limits)
    unit = level_unit(weighting, density)
    span = float(result.frequencies[0]), float(result.frequencies[-1])
    where = f"mean over {names(listed)}" if len(listed) > 1 else listed[0]
    facts = [
        f"{where} · {band_words(span)} · {WEIGHTING[weighting]}",
        load_case_words(result.load_case_of(load_case)),
    ]
    notes = [
        f"Colour: level of the panel’s share of the mean square in {unit}; orange raises the total, purple lowers it; "
        f"below {scale[0]:.0f} dB nothing is shown.",
        QUIETENING,
        f"Convention: {CONVENTION}. {origin(result)}.",
    ]
    rows = len(panels) * _ROW
    sheet = page("Participation of the panels over frequency", facts, notes, rows + _SPECTRUM + 0.95)
    across = sheet.width - _NAMES - _BAR
    edges = _edges(lines) if density else np.asarray(np.arange(len(lines) + 1) - 0.5, np.float64)
    lower = sheet.axes(_NAMES, 0.65, across, rows)
    upper = sheet.axes(_NAMES, 0.65 + rows + 0.22, across, _SPECTRUM)
    _image(lower, edges, _signed_levels(shares, scale), panels, scale)
    _spectrum(upper, lines, np.asarray(level(total)), density, scale, unit)
    _frequencies(lower, upper, lines, edges, density)
    high = max(rows, min(2.8, rows + _SPECTRUM))  # few panels: the bar reaches up beside the spectrum
    _bar(sheet.axes(_NAMES + across + 0.3, 0.65, 0.2, high), scale, unit)
    return sheet.figure


def _shares(
    result: Result, receivers: Sequence[str], load_case: str, weighting: str
) -> tuple[Floats, Floats, Floats, list[str]]:
    """Lines (nf,), weighted shares (nf, panels) and total (nf,) averaged over receivers, panels by falling share.

    Of tones only those that sound at all.
    """
    parts = [participation(result, name, load_case) for name in receivers]
    gain = 10 ** (weighting_db(weighting, result.frequencies) / 10)
    shares = np.mean([part.shares for part in parts], axis=0) * gain[:, None]
    total = np.mean([part.total for part in parts], axis=0) * gain
    kept = np.full(len(total), True) if is_density(result, load_case) else total > 0
    if not kept.any():
        raise ResultError(f"no tone of load case '{load_case or parts[0].load_case}' sounds on a line of the sweep; add it")
    order = np.argsort(-shares.sum(axis=0))
    return result.frequencies[kept], shares[kept][:, order], total[kept], [parts[0].loads[i] for i in order]


def _signed_levels(shares: Floats, scale: tuple[float, float]) -> Floats:
    """sign(share) max(L(|share|) - floor, 0)."""
    return np.asarray(np.sign(shares) * np.clip(level(np.abs(shares)) - scale[0], 0.0, scale[1] - scale[0]))


def _edges(f: Floats) -> Floats:
    """Cell edges half-way between the lines."""
    if len(f) == 1:
        return np.array([0.97 * f[0], 1.03 * f[0]])
    middle = 0.5 * (f[1:] + f[:-1])
    return np.concatenate([[f[0]], middle, [f[-1]]])


def _image(axes: Axes, edges: Floats, values: Floats, panels: Sequence[str], scale: tuple[float, float]) -> None:
    reach = scale[1] - scale[0]
    rows = np.arange(len(panels) + 1) - 0.5
    axes.pcolormesh(edges, rows, values.T, cmap=SIGNED_MAP, norm=Normalize(-reach, reach), rasterized=True)
    axes.set_ylim(len(panels) - 0.5, -0.5)
    axes.set_yticks(range(len(panels)), [short(panel, 22) for panel in panels], fontsize=10)
    axes.tick_params(axis="y", length=0)
    for row in rows[1:-1]:
        axes.axhline(row, color="white", linewidth=1.2)
    for side in ("top", "right"):
        axes.spines[side].set_visible(True)


def _spectrum(axes: Axes, f: Floats, total: Floats, density: bool, scale: tuple[float, float], unit: str) -> None:
    colour = LINES[0][0]
    if density:
        axes.plot(f, total, color=colour, linewidth=1.4)
    else:
        heard = np.isfinite(total)
        at = np.flatnonzero(heard)
        axes.vlines(at, scale[0], total[heard], color=colour, linewidth=2.2)
        axes.plot(at, total[heard], "o", color=colour, markersize=5)
    axes.set_ylim(scale[0], scale[1] + 3)
    axes.grid(True, axis="both")
    axes.set_axisbelow(True)
    axes.set_ylabel(f"total\n[{unit}]", fontsize=9.5)


def _frequencies(lower: Axes, upper: Axes, f: Floats, edges: Floats, density: bool) -> None:
    if density:
        frequency_axis(lower, float(edges[0]), float(edges[-1]))
        frequency_axis(upper, float(edges[0]), float(edges[-1]))
        lower.set_xlabel("frequency [Hz]")
    else:
        every = max(1, len(f) // 16)
        for axes in (lower, upper):
            axes.set_xlim(float(edges[0]), float(edges[-1]))
            axes.set_xticks(range(0, len(f), every), [f"{x:g}" for x in f[::every]])
        lower.set_xlabel("tone [Hz]")
    upper.tick_params(labelbottom=False)


def _bar(axes: Axes, scale: tuple[float, float], unit: str) -> None:
    reach = scale[1] - scale[0]
    mappable = ScalarMappable(Normalize(-reach, reach), matplotlib.colormaps[SIGNED_MAP])
    bar = axes.figure.colorbar(mappable, cax=axes, extend="both")
    steps = np.arange(10.0, reach + 0.1, 10.0)
    marks = np.concatenate([-steps[::-1], [0.0], steps])
    words = [f"{scale[0] + abs(m):.0f}" if m else f"≤ {scale[0]:.0f}" for m in marks]
    bar.set_ticks(marks.tolist(), labels=words)
    bar.outline.set_edgecolor(QUIET)
    bar.set_label(f"share [{unit}]", fontsize=9.5)
    high = axes.get_position().height * axes.figure.bbox.height / axes.figure.dpi
    axes.text(0.9, 1.05 + 0.1 / high, "raises", transform=axes.transAxes, ha="left", va="bottom", fontsize=9.5)
    axes.text(0.9, -0.05 - 0.1 / high, "lowers", transform=axes.transAxes, ha="left", va="top", fontsize=9.5)
