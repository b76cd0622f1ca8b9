"""Where it is loud: maps, cut planes and the model to turn, at the three lines that are worst at the receivers."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from murmesh.plugin.describe import hertz, load_case_words
from murmesh.plugin.pictures import cut_plane, surface_map
from murmesh.plugin.pictures.style import look
from murmesh.plugin.probe import rendering_missing
from murmesh.plugin.report.html import Html, join, not_computed, note, picture, tag
from murmesh.plugin.report.review import Review, worst_lines
from murmesh.plugin.report.viewer import View, model_view
from murmesh.solver.result import Result

TITLE = "Where it is loud"


def section(review: Review) -> Html:
    """The model to turn, then a map and cuts per line; one scale of colours for all of them."""
    result, name = review.result, review.load_case
    lines = worst_lines(result, name)
    if not lines:
        return not_computed("The result keeps no field, or nothing sounds; name field_frequencies and solve again.")
    view = View.of(result, lines, name)
    words = ", ".join(hertz(f) for f in lines)
    head = tag(
        "p",
        f"Loudest at the receivers, A-weighted, a third of an octave apart: {words}; "
        f"{load_case_words(result.load_case_of(name))}. The maps carry no frequency weighting and share one scale.",
    )
    missing = rendering_missing()
    without = note(f"The maps of the surfaces are left out: {missing}") if missing else ""
    return join([head, model_view(view), without, *_pictures(result, lines, name, view.limits, not missing)])


def _pictures(
    result: Result, lines: Sequence[float], name: str, limits: tuple[float, float], surfaces: bool
) -> Iterator[Html]:
    for line in lines:
        with look():
            drawn = [surface_map.figure(result, line, name, limits)] if surfaces else []
            cuts = cut_plane.figure(result, line, name, limits=limits)
        yield join(picture(figure, f"Level on the surfaces at {hertz(line)}") for figure in drawn)
        yield picture(cuts, f"Level on planes through the receivers at {hertz(line)}")
