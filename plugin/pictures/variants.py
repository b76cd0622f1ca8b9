"""Designs side by side: insertion loss per third octave, where the power goes, and level maps on one plane in one scale."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.colors import Normalize
from matplotlib.figure import Figure

from murmesh.plugin.describe import CONVENTION, WEIGHTING, band_words, hertz, is_density, level_unit, origin, signed
from murmesh.plugin.fields import field_levels
from murmesh.plugin.pictures.cut_plane import crossings
from murmesh.plugin.pictures.style import INK, LEVEL_MAP, LINES, QUIET, colour_bar, level_limits, look, page, save
from murmesh.plugin.sampling import sample_skin
from murmesh.plugin.variants import Variant, Variants, split
from murmesh.solver.levels import power_level
from murmesh.solver.power import RADIATED_LABEL
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]

_MARKS = "os^Dvx"
_ROW, _GAP = 3.1, 0.95  # inches: a chart, and the room for its words
_HATCHES = ("", "////", "....", "\\\\\\\\", "xx", "oo", "--")
_GREYS = ("#1f2a30", "#ffffff", "#e6e1d3", "#c3ced8", "#ffffff", "#ffffff", "#d9d9d9")
_LEAST = 0.06
"""Part of the input that a label needs in some variant to be shown by itself."""
_STEP, _RANGE = 0.03, 60.0  # metres between the points of a map; dB, for inside and outside lie far apart


def draw_losses(found: Variants, path: Path) -> Path:
    """Insertion loss per third octave, a chart per receiver."""
    with look():
        return save(losses(found), path)


def losses(found: Variants) -> Figure:
    """The figure, for further work."""
    facts = [
        f"level without ({found.reference.name}) minus level with · third octaves wholly in the sweep · positive: quieter",
        f"in brackets: the same for the {WEIGHTING['A']} level over {band_words(_band(found))}",
    ]
    notes = [f"Convention: {CONVENTION}.", f"{origin(found.reference.result)}.", _CAUTION]
    sheet = page("Insertion loss", facts, notes, len(found.receivers) * (_ROW + _GAP))
    for i, receiver in enumerate(found.receivers):
        up = (len(found.receivers) - 1 - i) * (_ROW + _GAP) + 0.55
        _curves(sheet.axes(0.75, up, sheet.width - 4.2, _ROW), found, receiver)
    return sheet.figure


_CAUTION = "Sound through the walls is not modelled, so real insertion losses end where the walls let through more."


def _band(found: Variants) -> tuple[float, float]:
    f = found.reference.result.frequencies
    return float(f[0]), float(f[-1])


def _curves(axes: Axes, found: Variants, receiver: str) -> None:
    for k, variant in enumerate(found.others):
        loss, (colour, dashes) = found.loss(variant, receiver), LINES[k % len(LINES)]
        label = f"{variant.name} ({signed(loss.overall, ' dB')})"
        white = "white" if k % 2 else colour
        axes.plot(range(len(loss.bands)), loss.values, color=colour, linestyle=dashes, marker=_MARKS[k % len(_MARKS)],
                  markerfacecolor=white, markersize=7, linewidth=1.6, label=label)  # fmt: skip
    axes.set_xticks(range(len(loss.bands)), [band.nominal for band in loss.bands])
    axes.axhline(0.0, color=INK, linewidth=0.9)
    axes.grid(True, axis="y")
    axes.set_axisbelow(True)
    axes.set_xlabel("third octave [Hz]")
    axes.set_ylabel("insertion loss [dB]")
    axes.set_title(receiver, loc="left", fontweight="bold", fontsize=12)
    axes.legend(loc="upper left", bbox_to_anchor=(1.01, 1.0), borderaxespad=0.0, handlelength=4.2)


def draw_powers(found: Variants, path: Path) -> Path:
    """A bar per variant: which part of its input is radiated, and which absorbed where."""
    with look():
        return save(powers(found), path)


def powers(found: Variants) -> Figure:
    """The figure, for further work."""
    facts = [f"parts of the power that the vibrating surfaces put in, over {band_words(_band(found))}"]
    notes = [
        f"Below {100 * _LEAST:.0f} % in every variant: 'others'. Hard walls take power by their residual absorption.",
        f"Convention: {CONVENTION}.",
        f"{origin(found.reference.result)}.",
    ]
    height = 0.62 * len(found.all) + 1.1
    sheet = page("Where the power goes", facts, notes, height + 0.45)
    axes = sheet.axes(2.3, 0.6, sheet.width - 4.3, height - 0.65)
    for row, variant in enumerate(found.all):
        _bar(axes, len(found.all) - 1 - row, variant, _shown(found), legend=row == 0)
    axes.set_yticks(range(len(found.all)), [variant.name for variant in reversed(found.all)])
    axes.set_xlim(0, 100)
    axes.set_xlabel("part of the input [%]")
    axes.legend(loc="lower left", bbox_to_anchor=(0.0, 1.0), ncols=len(_shown(found)), handlelength=1.8, columnspacing=1.4)
    return sheet.figure


def _shown(found: Variants) -> tuple[str, ...]:
    """Labels that are shown by themselves, what is radiated first; the others together."""
    most: dict[str, float] = {}
    for variant in found.all:
        for label, part in split(variant).items():
            most[label] = max(part, most.get(label, 0.0))
    large = [label for label in sorted(most, key=lambda label: -most[label]) if most[label] >= _LEAST]
    large.sort(key=lambda label: not label.startswith(RADIATED_LABEL))
    return (*large[: len(_HATCHES) - 1], "others")


def _bar(axes: Axes, row: int, variant: Variant, shown: Sequence[str], *, legend: bool) -> None:
    parts, left = split(variant), 0.0
    rest = sum(part for label, part in parts.items() if label not in shown)
    for k, label in enumerate(shown):
        width = 100 * (rest if label == "others" else parts.get(label, 0.0))
        axes.barh(row, width, 0.66, left=left, facecolor=_GREYS[k], edgecolor=INK, hatch=_HATCHES[k], linewidth=0.8,
                  label=_words(label) if legend else None)  # fmt: skip
        if width > (1.5 if k == 0 else 4):
            box = {"facecolor": _GREYS[k], "edgecolor": "none", "pad": 1.2}
            axes.text(left + width / 2, row, f"{width:.0f}", ha="center", va="center", fontsize=9.5, bbox=box,
                      color="white" if k == 0 else INK)  # fmt: skip
        left += width
    put_in = f"{float(power_level(variant.balance.total)):.1f} dB in, {float(power_level(variant.radiated)):.1f} dB out"
    axes.text(101, row, put_in, va="center", fontsize=9.5, color=QUIET)


def _words(label: str) -> str:
    kind, _, name = label.partition("/")
    return f"radiated ({name})" if kind == "radiated" else name or kind


def draw_maps(
    found: Sequence[Variant], path: Path, *, frequency: float, y: float, low: tuple[float, float], high: tuple[float, float]
) -> Path:
    """Levels at `frequency` on the plane of constant y between (x, z) = low and high, two maps in a row."""
    with look():
        return save(maps(found, frequency, y, low, high), path)


def maps(found: Sequence[Variant], frequency: float, y: float, low: tuple[float, float], high: tuple[float, float]) -> Figure:
    """The figure, for further work."""
    sampled = [_levels(variant.result, frequency, y, low, high) for variant in found]
    top = level_limits(np.concatenate([each.ravel() for each in sampled]))[1]
    scale = (top - _RANGE, top)
    facts = [f"{hertz(frequency)} · no frequency weighting · plane y = {y:g} m, through the air inside and outside"]
    notes = [
        "Thin lines: where the mesh ends, at walls and at the surface that radiates; the field beyond comes from the "
        "integral over that surface. Contours every 10 dB.",
        f"Convention: {CONVENTION}. {origin(found[0].result)}.",
    ]
    wide = (page("", [], [], 1.0).width - 1.5) / 2 - 0.75
    tall = wide * (high[1] - low[1]) / (high[0] - low[0])
    rows = -(-len(found) // 2)
    sheet = page("Sound pressure level inside and outside", facts, notes, rows * (tall + 0.95))
    for i, (variant, levels) in enumerate(zip(found, sampled, strict=True)):
        at = sheet.axes(0.7 + (i % 2) * (wide + 0.75), (rows - 1 - i // 2) * (tall + 0.95) + 0.55, wide, tall)
        _map(at, variant, levels, (*low, *high), y, scale)
    result = found[0].result
    bar = sheet.axes(sheet.width - 1.0, 0.55, 0.24, rows * (tall + 0.95) - 0.95)
    colour_bar(bar, scale, f"level [{level_unit('Z', is_density(result))}]", step=10.0)
    return sheet.figure


def _levels(result: Result, frequency: float, y: float, low: tuple[float, float], high: tuple[float, float]) -> Floats:
    """(rows, columns); nan in solids."""
    x, z = (np.arange(a + _STEP / 2, b, _STEP) for a, b in zip(low, high, strict=True))
    grid = np.stack(np.meshgrid(x, z), axis=-1)
    points = np.stack([grid[..., 0], np.full(grid.shape[:2], y), grid[..., 1]], axis=-1).reshape(-1, 3)
    return np.asarray(field_levels(result, result.pressure_at(points, frequency), "")).reshape(grid.shape[:2])


def _map(
    axes: Axes,
    variant: Variant,
    levels: Floats,
    frame: tuple[float, float, float, float],
    y: float,
    scale: tuple[float, float],
) -> None:
    extent = (frame[0], frame[2], frame[1], frame[3])
    axes.imshow(levels, origin="lower", extent=extent, cmap=LEVEL_MAP, norm=Normalize(*scale), interpolation="nearest")
    axes.contour(levels, np.arange(scale[0], scale[1] + 0.1, 10.0), extent=extent, colors=INK, linewidths=0.5, alpha=0.45)
    skin = sample_skin(variant.result.space, 0)
    lines = crossings(skin, np.array([0.0, y, 0.0]), np.array([0.0, 1.0, 0.0]))[:, :, [0, 2]]
    axes.add_collection(LineCollection(list(lines), colors=INK, linewidths=1.0))
    for receiver in variant.result.case.receivers:
        if abs(receiver.position[1] - y) < 0.05:
            axes.plot(receiver.position[0], receiver.position[2], "o", color="white", markeredgecolor=INK, markersize=7)
            axes.annotate(receiver.name, (receiver.position[0], receiver.position[2]), (-8, 8), textcoords="offset points",
                          ha="right", fontsize=9, bbox={"facecolor": "white", "edgecolor": "none", "pad": 1.0})  # fmt: skip
    axes.set(xlim=extent[:2], ylim=extent[2:], xlabel="x [m]", ylabel="z [m]")
    axes.set_aspect("equal")
    axes.set_title(variant.name, loc="left", fontweight="bold", fontsize=11)
