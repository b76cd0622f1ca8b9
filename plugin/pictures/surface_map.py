"""Level map on all surfaces at one frequency, looked at from the inside."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

from murmesh.plugin.describe import CONVENTION, hertz, is_density, level_unit, load_case_words, origin
from murmesh.plugin.fields import field_levels, kept_line
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.pictures.labels import receiver_dots, triad
from murmesh.plugin.pictures.scene import VIEWS_NOTE, two_views
from murmesh.plugin.pictures.style import LEVEL_MAP, colour_bar, level_limits, look, page, save
from murmesh.plugin.sampling import sample_skin, values_on
from murmesh.solver.result import Result

_HEIGHT, _BAR = 5.9, 1.35  # inches


@PICTURES.member("surface_map", ".png", "level on all surfaces at one frequency, in two views", renders=True)
def draw(
    result: Result,
    path: Path,
    *,
    frequency: float | None = None,
    load_case: str = "",
    limits: tuple[float, float] | None = None,
) -> Path:
    """Draw the field kept at `frequency` (None: the loudest at the receivers); `limits` [dB] of the scale.

    Raises MissingLibraryError where nothing can be rendered, ResultError if no field is kept there.
    """
    with look():
        return save(figure(result, frequency, load_case, limits), path)


def figure(
    result: Result,
    frequency: float | None = None,
    load_case: str = "",
    limits: tuple[float, float] | None = None,
) -> Figure:
    """The figure, for further work."""
    line = kept_line(result, frequency, load_case)
    skin = sample_skin(result.space)
    pressure = np.asarray(values_on(result.space, skin.cloud, result.field(line, load_case)), dtype=np.complex128)
    levels = field_levels(result, pressure, load_case)
    scale = level_limits(levels, limits)
    facts = [
        f"{hertz(line)} · no frequency weighting · highest {levels.max():.1f} dB",
        load_case_words(result.load_case_of(load_case)),
    ]
    notes = [VIEWS_NOTE, f"Convention: {CONVENTION}. {origin(result)}."]
    sheet = page("Sound pressure level on the surfaces", facts, notes, _HEIGHT)
    shown = np.maximum(levels, scale[0])  # a pressure node must not pull its neighbours down between the points
    for axes, view in two_views(sheet.narrowed(_BAR), skin, 0.05, 0.0, scalars=shown, cmap=LEVEL_MAP, clim=scale):
        triad(axes, view)
        places = np.array([receiver.position for receiver in result.case.receivers]).reshape(-1, 3)
        receiver_dots(axes, result.case.receivers, view.project(places))
    bar = sheet.axes(sheet.width - _BAR + 0.3, 0.6, 0.24, _HEIGHT - 1.5)
    colour_bar(bar, scale, f"level [{level_unit('Z', is_density(result, load_case))}]")
    return sheet.figure
