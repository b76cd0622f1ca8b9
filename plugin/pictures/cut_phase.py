"""One period of the phase on cut planes, p cos(wt + phase): the same planes as `cut_plane`, signed colours, fixed limits."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from pathlib import Path

import numpy as np
import numpy.typing as npt
from matplotlib.collections import LineCollection
from matplotlib.figure import Figure
from matplotlib.image import AxesImage

from murmesh.plugin.describe import CONVENTION, load_case_words, origin
from murmesh.plugin.fields import kept_line
from murmesh.plugin.pictures import PICTURES, film
from murmesh.plugin.pictures.cut_plane import BAR, Arrangement, Vector, cuts_of, frame_cut
from murmesh.plugin.pictures.style import INK, SIGNED_MAP, colour_bar, look, page
from murmesh.solver.result import Result

Complex = npt.NDArray[np.complex128]


@PICTURES.member("cut_phase", ".gif", "one period of the phase on planes through the receivers", source="phase")
def draw(
    result: Result,
    path: Path,
    *,
    frequency: float | None = None,
    load_case: str = "",
    planes: Sequence[tuple[Vector, Vector]] = (),
    limit: float | None = None,
    frames: int = film.FRAMES,
) -> Path:
    """Animate the field kept at `frequency` (None: the loudest at the receivers); colours reach from -limit to limit [Pa].

    Raises ResultError if no field is kept there, MissingLibraryError for an MP4 without an encoder.
    """
    film.check_format(Path(path))
    with look():
        return film.write(pictures(result, frequency, load_case, planes, limit, frames), path)


def pictures(
    result: Result,
    frequency: float | None = None,
    load_case: str = "",
    planes: Sequence[tuple[Vector, Vector]] = (),
    limit: float | None = None,
    frames: int = film.FRAMES,
) -> Iterator[film.Image]:
    """The pictures of one period."""
    turns = film.phases(frames)
    figure, shown = still(result, frequency, load_case, planes, limit)
    for turn in turns:
        for image, pressure in shown:
            image.set_data(np.real(pressure * np.exp(1j * turn)))
        yield film.picture(figure)


def still(
    result: Result,
    frequency: float | None = None,
    load_case: str = "",
    planes: Sequence[tuple[Vector, Vector]] = (),
    limit: float | None = None,
) -> tuple[Figure, list[tuple[AxesImage, Complex]]]:
    """The figure, and its images with the pressures (rows, columns) that they show."""
    line = kept_line(result, frequency, load_case)
    cuts = cuts_of(result, planes, line, load_case)
    whole = np.concatenate([layer.columns for cut in cuts for layer in cut.layers])
    column = int(np.nansum(np.abs(whole) ** 2, axis=0).argmax())
    top = limit or film.limit_of(whole[:, column])
    facts = [film.amplitude_words(result, line, load_case), load_case_words(result.load_case_of(load_case))]
    notes = [film.strongest_words(whole), f"Convention: {CONVENTION}. {origin(result)}."]
    layout = Arrangement.of(cuts)
    sheet = page("Sound pressure on cut planes", facts, [note for note in notes if note], layout.height)
    shown = []
    for (left, bottom), cut in zip(layout.corners, cuts, strict=True):
        axes = sheet.axes(left, bottom, *(cut.size * layout.scale))
        for layer in cut.layers:
            pressure, box = layer.pressure[..., column], layer.extent
            image = axes.imshow(pressure.real, origin="lower", extent=box, cmap=SIGNED_MAP, vmin=-top, vmax=top)
            shown.append((image, pressure))
        axes.add_collection(LineCollection(list(cut.outline), colors=INK, linewidths=1.2, clip_on=False))
        frame_cut(axes, result.case, cut, layout.scale)
    high = min(layout.height - 0.6, 4.2)
    bar = sheet.axes(sheet.width - BAR + 0.3, (layout.height - high) / 2, 0.24, high)
    colour_bar(bar, (-top, top), "sound pressure [Pa, peak]", colours=SIGNED_MAP, step=top / 4)
    return sheet.figure, shown
