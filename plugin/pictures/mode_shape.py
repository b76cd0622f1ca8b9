"""Shapes of cavity modes: the signed pressure on the surfaces, relative to its largest value."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

from murmesh.plugin.describe import hertz
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.pictures.labels import receiver_dots, triad
from murmesh.plugin.pictures.scene import VIEWS_NOTE, two_views
from murmesh.plugin.pictures.style import SIGNED_MAP, colour_bar, look, page, save
from murmesh.plugin.sampling import Skin, sample_skin, values_on
from murmesh.solver.errors import ResultError
from murmesh.solver.modes import Modes
from murmesh.solver.orders import orders_text

_HEIGHT, _BAR = 5.9, 1.35  # inches


@PICTURES.member("mode_shape", ".png", "pressure of one cavity mode on the surfaces", renders=True, source="modes")
def draw(modes: Modes, path: Path, *, index: int = 0) -> Path:
    """Draw mode number `index` (from 0) of those found.

    Raises MissingLibraryError where nothing can be rendered, ResultError for a mode that was not found.
    """
    with look():
        return save(figure(modes, index), path)


def draw_all(modes: Modes, folder: str | Path) -> list[Path]:
    """Draw every mode into a folder, made if it is missing: mode_01.png, mode_02.png, ..."""
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    skin = sample_skin(modes.space)
    with look():
        return [
            save(figure(modes, index, skin), folder / f"mode_{index + 1:02d}.png") for index in range(len(modes.frequencies))
        ]


def figure(modes: Modes, index: int = 0, skin: Skin | None = None) -> Figure:
    """The figure, for further work."""
    if not 0 <= index < len(modes.frequencies):
        raise ResultError(f"mode {index} is asked of {len(modes.frequencies)}; give 0 .. {len(modes.frequencies) - 1}")
    skin = skin or sample_skin(modes.space)
    shape = np.asarray(values_on(modes.space, skin.cloud, modes.shapes[:, index]), dtype=np.float64)
    case = modes.space.case
    facts = [
        "pressure relative to its largest value at a vertex; the two colours swing in opposite phase, white is a node",
        "hard walls, no losses, no load; no frequency weighting",
    ]
    notes = [VIEWS_NOTE, f"{case.title or 'untitled case'} · elements of {orders_text(modes.space.dofs.orders)}."]
    sheet = page(f"Cavity mode at {hertz(float(modes.frequencies[index]))}", facts, notes, _HEIGHT)
    drawn = two_views(sheet.narrowed(_BAR), skin, 0.05, 0.0, scalars=shape, cmap=SIGNED_MAP, clim=(-1.0, 1.0))
    places = np.array([receiver.position for receiver in case.receivers]).reshape(-1, 3)
    for axes, view in drawn:
        triad(axes, view)
        receiver_dots(axes, case.receivers, view.project(places))
    bar = sheet.axes(sheet.width - _BAR + 0.3, 0.6, 0.24, _HEIGHT - 1.5)
    colour_bar(bar, (-1.0, 1.0), "relative pressure", colours=SIGNED_MAP, step=0.5)
    return sheet.figure
