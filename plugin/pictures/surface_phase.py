"""One period of the phase on all surfaces, p cos(wt + phase): the same views as `surface_map`, signed colours, fixed limits.

Each view is rendered twice, the real and imaginary parts as two colour channels and the outlines as grey; every picture of
the period is worked out from these, so that a frame costs no rendering.
"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import matplotlib
import numpy as np
import numpy.typing as npt
from matplotlib.figure import Figure
from matplotlib.image import AxesImage

from murmesh.plugin.describe import CONVENTION, load_case_words, origin
from murmesh.plugin.fields import kept_line
from murmesh.plugin.pictures import PICTURES, film
from murmesh.plugin.pictures.labels import receiver_dots, triad
from murmesh.plugin.pictures.scene import VIEWS_NOTE, Outline, render, two_views
from murmesh.plugin.pictures.style import SIGNED_MAP, colour_bar, look, page
from murmesh.plugin.sampling import sample_skin, values_on
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]
_HEIGHT, _BAR = 5.9, 1.35  # inches


@PICTURES.member(
    "surface_phase", ".gif", "one period of the phase on all surfaces, in two views", renders=True, source="phase"
)
def draw(
    result: Result,
    path: Path,
    *,
    frequency: float | None = None,
    load_case: str = "",
    limit: float | None = None,
    frames: int = film.FRAMES,
) -> Path:
    """Animate the field kept at `frequency` (None: the loudest at the receivers); colours reach from -limit to limit [Pa].

    Raises MissingLibraryError where nothing can be rendered or encoded, ResultError if no field is kept there.
    """
    film.check_format(Path(path))
    with look():
        return film.write(pictures(result, frequency, load_case, limit, frames), path)


def pictures(
    result: Result,
    frequency: float | None = None,
    load_case: str = "",
    limit: float | None = None,
    frames: int = film.FRAMES,
) -> Iterator[film.Image]:
    """The pictures of one period."""
    turns = film.phases(frames)
    figure, shown = still(result, frequency, load_case, limit)
    for turn in turns:
        for image, view in shown:
            image.set_data(view.at(turn))
        yield film.picture(figure)


class Rendered:
    """One view: parts (height, width, 2) of the pressure in units of the limit, where there is a wall, and the outlines."""

    def __init__(self, parts: film.Image, outlines: film.Image) -> None:
        self.values = (parts[..., :2].astype(np.float64) - 128) / 127
        self.wall = parts[..., 2] == 0
        self.outlines = outlines.astype(np.float64) / 255
        self.colours = matplotlib.colormaps[SIGNED_MAP]

    def at(self, turn: float) -> film.Image:
        """The view at wt = `turn`, Re(p e^{i turn}) as colours."""
        signed = self.values @ np.array([np.cos(turn), -np.sin(turn)])
        colour = self.colours(0.5 + 0.5 * signed)[..., :3]
        out = np.where(self.wall[..., None], colour, 1.0) * self.outlines
        return np.asarray(np.round(255 * out), dtype=np.uint8)


def still(
    result: Result, frequency: float | None = None, load_case: str = "", limit: float | None = None
) -> tuple[Figure, list[tuple[AxesImage, Rendered]]]:
    line = kept_line(result, frequency, load_case)
    skin = sample_skin(result.space)
    field = np.asarray(values_on(result.space, skin.cloud, result.field(line, load_case)), dtype=np.complex128)
    pressure = film.strongest(field)
    top = limit or film.limit_of(pressure)
    facts = [film.amplitude_words(result, line, load_case), load_case_words(result.load_case_of(load_case))]
    notes = [film.strongest_words(field), VIEWS_NOTE, f"Convention: {CONVENTION}. {origin(result)}."]
    sheet = page("Sound pressure on the surfaces", facts, [note for note in notes if note], _HEIGHT)
    parts = np.clip(128 + 127 * np.stack([pressure.real, pressure.imag], axis=1) / top, 0, 255)
    channels = np.column_stack([np.round(parts), np.zeros(len(parts))]).astype(np.uint8)
    outline = Outline.of(skin)
    shown = []
    for axes, view in two_views(sheet.narrowed(_BAR), skin, 0.05, 0.0, color="white"):
        image = axes.images[0]
        lines = np.asarray(image.get_array(), dtype=np.uint8)
        pixels = lines.shape[1], lines.shape[0]
        shown.append((image, Rendered(render(view, skin, outline, pixels, smooth=False, scalars=channels, rgb=True), lines)))
        triad(axes, view)
        places = np.array([receiver.position for receiver in result.case.receivers]).reshape(-1, 3)
        receiver_dots(axes, result.case.receivers, view.project(places))
    bar = sheet.axes(sheet.width - _BAR + 0.3, 0.6, 0.24, _HEIGHT - 1.5)
    colour_bar(bar, (-top, top), "sound pressure [Pa, peak]", colours=SIGNED_MAP, step=top / 4)
    return sheet.figure, shown
