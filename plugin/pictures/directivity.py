"""Directivity of what radiates: levels of the far field in three planes, and the balloon of all directions."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
from matplotlib import colormaps
from matplotlib.colors import Normalize
from matplotlib.figure import Figure

from murmesh.plugin.describe import CONVENTION, hertz, is_density, level_unit, load_case_words, number, origin
from murmesh.plugin.directivity import RANGE_DB, Pattern, levels, pattern
from murmesh.plugin.fields import kept_line
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.pictures.style import LEVEL_MAP, LINES, Page, look, page, save
from murmesh.solver.levels import power_level
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]
PLANES = (("x-y", 0, 1), ("x-z", 0, 2), ("y-z", 1, 2))
_ROW, _HEADING = 4.6, 0.5  # inches


@PICTURES.member("directivity", ".png", "far field in three planes and as a balloon", source="outside")
def draw(result: Result, path: Path, *, frequency: float | None = None, load_case: str = "") -> Path:
    """Draw a row per surface that radiates, at the line kept at `frequency` (None: the loudest at the receivers)."""
    with look():
        return save(figure(result, frequency, load_case), path)


def figure(result: Result, frequency: float | None = None, load_case: str = "") -> Figure:
    """The figure, for further work."""
    line = kept_line(result, frequency, load_case)
    found = pattern(result, line, load_case)
    unit = level_unit("Z", is_density(result, load_case))
    facts = [f"{hertz(line)} · no frequency weighting · {load_case_words(result.load_case_of(load_case))}"]
    notes = [
        f"Levels of the far field, scaled to 1 m from the centre: {unit}. Nearer than a few wave lengths or sizes of the "
        "source the field itself is another. The balloon's radius falls to nothing at 40 dB below the loudest direction.",
        f"Convention: {CONVENTION}. {origin(result)}.",
    ]
    sheet = page("Directivity", facts, notes, len(found) * (_ROW + _HEADING))
    for i, (far, outside) in enumerate(zip(found, result.outside(line, load_case), strict=True)):
        up = (len(found) - 1 - i) * (_ROW + _HEADING)
        _polar(sheet, up, far, lambda d, o=outside: levels(result, o, d, load_case)[0])
        _balloon(sheet, up, far)
        watts = far.power / result.bandwidth(load_case)
        per = " per Hz" if is_density(result, load_case) else ""
        power = f"{number(float(power_level(watts)))} dB re 1 pW{per} radiated"
        words = f"{far.name}: {power}, directivity index up to {far.index.max():+.1f} dB"
        sheet.write(words, 0.0, up + _ROW + 0.15, fontsize=12, fontweight="bold")
    return sheet.figure


def _polar(sheet: Page, up: float, far: Pattern, level: Any) -> None:
    axes: Any = sheet.axes(0.7, up + 0.35, 4.6, _ROW - 0.75, projection="polar")
    top = 5.0 * np.ceil(far.level.max() / 5.0)
    angle = np.radians(np.arange(0.0, 360.1, 2.5))
    for (name, a, b), (colour, dashes) in zip(PLANES, LINES, strict=False):
        d = np.zeros((len(angle), 3))
        d[:, a], d[:, b] = np.cos(angle), np.sin(angle)
        above = np.ones(len(d), dtype=bool) if far.normal is None else d @ far.normal > -1e-9
        heard = np.where(above, np.maximum(level(d), top - RANGE_DB), np.nan)
        axes.plot(angle, heard, color=colour, linestyle=dashes, linewidth=1.6, label=f"{name} plane")
    axes.set_ylim(top - RANGE_DB, top)
    axes.set_yticks(np.arange(top - RANGE_DB + 10.0, top + 0.1, 10.0))
    axes.grid(True)
    axes.legend(loc="center left", bbox_to_anchor=(1.12, 0.5))
    axes.set_title("0°: first axis of the plane", fontsize=9.5, loc="left")


def _balloon(sheet: Page, up: float, far: Pattern) -> None:
    axes: Any = sheet.axes(sheet.width - 5.2, up + 0.1, 5.0, _ROW - 0.1, projection="3d")
    x, y, z = (far.radius[:, None] * far.directions).T
    norm = Normalize(far.level.max() - 0.5 * RANGE_DB, far.level.max())
    heights = far.level[far.triangles].mean(axis=1)
    surface = axes.plot_trisurf(x, y, z, triangles=far.triangles, linewidth=0.1, edgecolor="#6b7880", shade=False)
    surface.set_facecolor(colormaps[LEVEL_MAP](norm(heights)))
    axes.set_xlim(-1, 1)
    axes.set_ylim(-1, 1)
    axes.set_zlim(-1, 1)
    axes.set_box_aspect((1, 1, 1), zoom=0.95)
    axes.set_xlabel("x", labelpad=-12)
    axes.set_ylabel("y", labelpad=-12)
    axes.set_zlabel("z", labelpad=-12)
    for axis in (axes.xaxis, axes.yaxis, axes.zaxis):
        axis.set_ticklabels([])
