"""The panels of the model, coloured by the best gain that a treatment of the catalogue brings there."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

from murmesh.plugin.describe import CONVENTION, level_unit, origin, short, signed
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.pictures.labels import anchors, in_margins, receiver_dots, triad
from murmesh.plugin.pictures.scene import VIEWS_NOTE, Outline, panel_pixels, two_views
from murmesh.plugin.pictures.study_facts import goal_facts
from murmesh.plugin.pictures.style import GAIN_MAP, colour_bar, look, page, save
from murmesh.plugin.sampling import sample_skin
from murmesh.plugin.study import Measure, Study

_HEIGHT, _BELOW, _NAMES = 5.3, 0.75, 1.52  # inches: views and bar, the bar, room for names beside a view
_BARE = "#b4bcc1"


@PICTURES.member(
    "gain_colours", ".png", "panels coloured by what the best treatment there brings", renders=True, source="study"
)
def draw(study: Study, path: Path) -> Path:
    """Draw the best gain of every panel on the model. Raises MissingLibraryError where nothing can be rendered."""
    with look():
        return save(figure(study), path)


def best_measures(study: Study) -> dict[str, Measure]:
    """The best treatment of every panel that one may go on."""
    found: dict[str, Measure] = {}
    for measure in study.treat:  # best first
        found.setdefault(measure.panel, measure)
    return found


def figure(study: Study) -> Figure:
    """The figure, for further work."""
    result, best = study.result, best_measures(study)
    surfaces = [surface.name for surface in result.case.surfaces]
    gain = {surfaces.index(panel): measure.gain for panel, measure in best.items()}
    reach = float(np.ceil(2 * max(0.5, *map(abs, gain.values()))) / 2)
    skin = sample_skin(result.space)
    chosen = " + ".join(option.name for option in study.used(study.best)) or "nothing"
    notes = [
        "Gain of the best single treatment of the catalogue on each panel, computed with it in place; grey panels take none.",
        f"Chosen within the limits: {chosen}. {study.words}",
        VIEWS_NOTE,
        f"Convention: {CONVENTION}. {origin(result)}.",
    ]
    sheet = page("Where a treatment helps", goal_facts(study), notes, _HEIGHT)
    cells = np.array([gain.get(index, np.nan) for index in range(len(surfaces))] + [np.nan])[skin.surface]
    drawn = two_views(sheet, skin, _NAMES, _BELOW, scalars=cells, cmap=GAIN_MAP, clim=(-reach, reach), nan_color=_BARE)
    words = {surfaces.index(panel): _words(measure) for panel, measure in best.items()}
    places = np.array([receiver.position for receiver in result.case.receivers]).reshape(-1, 3)
    outline = Outline.of(skin)
    for axes, view in drawn:
        height, width = axes.images[0].get_array().shape[:2]  # type: ignore[union-attr]
        spots = anchors(panel_pixels(view, skin, outline, (width, height)), view, words)
        in_margins(axes, spots, view, gap=0.42 * 2 * view.half_height / (_HEIGHT - _BELOW))
        receiver_dots(axes, result.case.receivers, view.project(places))
        triad(axes, view)
    bar = sheet.axes(sheet.width / 2 - 3, 0.42, 6.0, 0.18)
    unit = level_unit(study.goal.weighting).split(" re ")[0]
    colour_bar(bar, (-reach, reach), f"louder  ◂  gain of the best treatment [{unit}]  ▸  quieter", colours=GAIN_MAP,
               step=0.5 if reach <= 3 else 1.0, upright=False)  # fmt: skip
    return sheet.figure


def _words(measure: Measure) -> str:
    return f"{short(measure.panel, 18)}\n{short(measure.treatment, 12)} {signed(measure.gain, ' dB', 2)}"
