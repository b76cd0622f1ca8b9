"""What is not modelled, and cautions."""

from __future__ import annotations

from murmesh.plugin.report.html import Html, join, tag
from murmesh.plugin.report.review import Review

TITLE = "What is not modelled, and cautions"
NOT_MODELLED = (
    "sound through walls, and air-borne paths from outside",
    "flow, and sound that flow makes",
    "the elasticity of frames and panels: velocities are given, not computed",
    "the panels' own response to a treatment or to the air",
    "frequencies outside the sweep, and receivers elsewhere than stated (a head moves, a person absorbs)",
)
OUTSIDE = (
    "bodies and walls outside other than the stated ground plane, and a ground that absorbs",
    "wind, temperature and absorption in the air outside",
)
CAUTIONS = (
    "Predictions are not measurements, noise declarations or exposure assessments.",
    "Hearing limits and noise-declaration duties are set by local law and standards and decided by qualified people.",
    "Damage to hearing or machinery can follow from wrong numbers: have them checked before anything is built or decided.",
)


def section(review: Review) -> Html:
    """Two lists."""
    return join(
        [
            tag("h3", "Not modelled"),
            _list(NOT_MODELLED + (OUTSIDE if review.result.radiates else ())),
            tag("h3", "Cautions"),
            _list(CAUTIONS),
        ]
    )


def _list(items: tuple[str, ...]) -> Html:
    return tag("ul", *(tag("li", item) for item in items))
