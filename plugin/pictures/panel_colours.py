"""The panels of the model, coloured by their share of the mean square in a band, each with its name and number."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

from murmesh.plugin.describe import CONVENTION, names, origin, short, signed
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.pictures.contribution_bars import ranking_facts, ranking_notes
from murmesh.plugin.pictures.labels import anchors, in_margins, receiver_dots, triad
from murmesh.plugin.pictures.scene import VIEWS_NOTE, Outline, panel_pixels, two_views
from murmesh.plugin.pictures.style import SIGNED_MAP, colour_bar, look, page, save
from murmesh.plugin.sampling import sample_skin
from murmesh.solver.contribution import Ranking, rank
from murmesh.solver.result import Result

_HEIGHT, _BELOW, _NAMES = 5.3, 0.75, 1.52  # inches: views and bar, the bar, room for names beside a view
_STILL = "#b4bcc1"


@PICTURES.member("panel_colours", ".png", "panels coloured by their share in a band, with their names", renders=True)
def draw(
    result: Result,
    path: Path,
    *,
    receivers: tuple[str, ...] = (),
    band: tuple[float, float] | None = None,
    weighting: str = "A",
    load_case: str = "",
) -> Path:
    """Draw the ranking over `band` (None: the whole sweep), summed over `receivers` (none: all), on the model.

    Raises MissingLibraryError where nothing can be rendered.
    """
    with look():
        return save(figure(result, receivers, band, weighting, load_case), path)


def figure(
    result: Result,
    receivers: Sequence[str] = (),
    band: tuple[float, float] | None = None,
    weighting: str = "A",
    load_case: str = "",
) -> Figure:
    """The figure, for further work."""
    ranking = rank(result, receivers, band, weighting, load_case)
    surfaces = [surface.name for surface in result.case.surfaces]
    share = {surfaces.index(row.panel): 100 * row.share for row in ranking.rows if row.panel in surfaces}
    reach = 10.0 * np.ceil(max(10.0, *map(abs, share.values())) / 10.0) if share else 10.0
    skin = sample_skin(result.space)
    notes = [
        *ranking_notes(ranking),
        *_elsewhere(ranking, surfaces, share),
        VIEWS_NOTE,
        f"Convention: {CONVENTION}. {origin(result)}.",
    ]
    sheet = page("Panels by their share of the mean square", ranking_facts(result, ranking), notes, _HEIGHT)
    cells = np.array([share.get(index, np.nan) for index in range(len(surfaces))] + [np.nan])[skin.surface]
    drawn = two_views(sheet, skin, _NAMES, _BELOW, scalars=cells, cmap=SIGNED_MAP, clim=(-reach, reach), nan_color=_STILL)
    words = {index: f"{short(surfaces[index], 18)}\n{signed(value, ' %')}" for index, value in share.items()}
    places = np.array([receiver.position for receiver in result.case.receivers]).reshape(-1, 3)
    outline = Outline.of(skin)
    for axes, view in drawn:
        height, width = axes.images[0].get_array().shape[:2]  # type: ignore[union-attr]
        spots = anchors(panel_pixels(view, skin, outline, (width, height)), view, words)
        in_margins(axes, spots, view, gap=0.42 * 2 * view.half_height / (_HEIGHT - _BELOW))
        receiver_dots(axes, result.case.receivers, view.project(places))
        triad(axes, view)
    bar = sheet.axes(sheet.width / 2 - 3, 0.42, 6.0, 0.18)
    colour_bar(bar, (-reach, reach), "lowers the level  ◂  share of the mean square [%]  ▸  raises the level",
               colours=SIGNED_MAP, step=10.0 if reach <= 60 else 20.0, upright=False)  # fmt: skip
    return sheet.figure


def _elsewhere(ranking: Ranking, surfaces: Sequence[str], share: dict[int, float]) -> list[str]:
    """What grey means, and sources that are no surface."""
    sources = [f"{row.panel} {signed(100 * row.share, ' %')}" for row in ranking.rows if row.panel not in surfaces]
    notes = ["Grey surfaces carry no load in this load case."] if len(share) < len(surfaces) else []
    return [*notes, f"Sources in the air, not drawn: {names(sources)}."] if sources else notes
