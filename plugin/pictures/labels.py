"""Words that do not run into each other: names in the margin with leaders, names beside dots, the axes' triad."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.text import Annotation
from matplotlib.transforms import Bbox
from scipy.ndimage import distance_transform_edt

from murmesh.plugin.describe import short
from murmesh.plugin.pictures.scene import View
from murmesh.plugin.pictures.style import INK, QUIET
from murmesh.solver.case.model import Receiver

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
_HALO = {"boxstyle": "round,pad=0.18", "facecolor": "white", "edgecolor": "none", "alpha": 0.82}
_PLACES = ((8, 0), (-8, 0), (8, 9), (8, -9), (-8, 9), (-8, -9), (0, 9), (0, -9), (8, 20), (-8, 20), (8, -20), (-8, -20))


@dataclass(frozen=True)
class Anchor:
    """A word and the spot on the page [m] that it names."""

    text: str
    x: float
    y: float


def anchors(seen: Ints, view: View, words: dict[int, str], smallest: int = 60) -> list[Anchor]:
    """For every surface in `words` that is seen on at least `smallest` pixels: the spot farthest from its outline."""
    height, width = seen.shape
    left, right, bottom, top = view.extent
    out = []
    for surface, text in words.items():
        mask = np.pad(seen == surface, 1)
        if mask.sum() < smallest:
            continue
        depth = np.asarray(distance_transform_edt(mask))[1:-1, 1:-1]
        row, column = np.unravel_index(int(np.argmax(depth)), depth.shape)
        x = left + (column + 0.5) / width * (right - left)
        out.append(Anchor(text, float(x), float(top - (row + 0.5) / height * (top - bottom))))
    return out


def in_margins(axes: Axes, spots: Sequence[Anchor], view: View, gap: float) -> None:
    """Write the words left and right of the view at least `gap` [m] apart, joined to their spots by leaders."""
    rows = int(2 * view.half_height / gap)
    crowded = max(sum(spot.x <= 0 for spot in spots), sum(spot.x > 0 for spot in spots)) > rows
    middle = float(np.median([spot.x for spot in spots])) if crowded else 0.0
    for side in (-1, 1):
        own = sorted((s for s in spots if (s.x <= middle) == (side < 0)), key=lambda s: -s.y)
        heights = spread(np.array([s.y for s in own]), gap, view.half_height)
        for spot, y in zip(own, heights, strict=True):
            axes.plot(spot.x, spot.y, "o", color=INK, markersize=3.5, zorder=5)
            axes.annotate(
                spot.text, (spot.x, spot.y), (side * view.half_width * 1.02, float(y)), annotation_clip=False,
                ha="right" if side < 0 else "left", va="center", fontsize=10, linespacing=1.15,
                arrowprops={"arrowstyle": "-", "color": INK, "linewidth": 0.7, "shrinkA": 2, "shrinkB": 0},
            )  # fmt: skip


def spread(wanted: Floats, gap: float, reach: float) -> Floats:
    """Heights near `wanted` (falling), at least `gap` apart and within +-reach where that is possible."""
    if not len(wanted):
        return wanted
    steps = gap * np.arange(len(wanted))
    # with the steps added, "at least gap apart" means "not rising": violators are pooled at their mean
    blocks: list[list[float]] = []
    for value in wanted + steps:
        blocks.append([float(value), 1.0])
        while len(blocks) > 1 and blocks[-1][0] > blocks[-2][0]:
            (a, m), (b, n) = blocks[-2:]
            blocks[-2:] = [[(a * m + b * n) / (m + n), m + n]]
    level = np.concatenate([np.full(int(n), value) for value, n in blocks])
    top, bottom = reach, -reach + steps[-1]
    return np.asarray(np.clip(level, min(bottom, top), top) - steps)


def receiver_dots(axes: Axes, receivers: Sequence[Receiver], places: Floats, near: Sequence[bool] | None = None) -> None:
    """Dots with names at `places` (k, 2); hollow where not `near`; those on one spot share a label."""
    solid = [True] * len(receivers) if near is None else near
    for (x, y), full in zip(places, solid, strict=True):
        face, edge = (INK, "white") if full else ("white", INK)
        axes.plot(x, y, "o", markersize=7, markerfacecolor=face, markeredgecolor=edge, markeredgewidth=1.2, zorder=6)
    taken: list[Bbox] = [_dot_box(axes, place) for place in places]
    for place, text in _merged(axes, [receiver.name for receiver in receivers], places):
        _beside(axes, place, text, taken)


def _merged(axes: Axes, names: Sequence[str], places: Floats) -> list[tuple[Floats, str]]:
    """Names of places closer than a dot, joined."""
    pixels = axes.transData.transform(places) if len(places) else np.empty((0, 2))
    groups: list[list[int]] = []
    for i in range(len(names)):
        near = next((g for g in groups if np.linalg.norm(pixels[g[0]] - pixels[i]) < 8), None)
        groups.append([i]) if near is None else near.append(i)
    return [(places[g[0]], ", ".join(short(names[i], 24) for i in g)) for g in groups]


def _dot_box(axes: Axes, place: Floats) -> Bbox:
    x, y = axes.transData.transform(place)
    return Bbox([[x - 6, y - 6], [x + 6, y + 6]])


def _beside(axes: Axes, place: Floats, text: str, taken: list[Bbox]) -> None:
    """Put a name at the first place around its dot that is free: inside the axes, or else on the page."""
    boxes = []
    for offset in _PLACES:
        trial = _named(axes, place, text, offset)
        boxes.append(trial.get_window_extent())
        trial.remove()
    page = axes.figure.bbox
    free = [k for k, box in enumerate(boxes) if not box.count_overlaps(taken)]
    inside = [k for k in free if axes.bbox.x0 <= boxes[k].x0 and boxes[k].x1 <= axes.bbox.x1]
    on_page = [k for k in free if page.x0 <= boxes[k].x0 and boxes[k].x1 <= page.x1]
    best = (inside or on_page or [0])[0]
    _named(axes, place, text, _PLACES[best])
    taken.append(boxes[best])


def _named(axes: Axes, place: Floats, text: str, offset: tuple[int, int]) -> Annotation:
    dx, dy = offset
    return axes.annotate(
        text,
        (float(place[0]), float(place[1])),
        offset,
        textcoords="offset points",
        ha="left" if dx > 0 else "right" if dx < 0 else "center",
        va="bottom" if dy > 0 else "top" if dy < 0 else "center",
        fontsize=9.5,
        zorder=7,
        bbox=_HALO,
    )


def triad(axes: Axes, view: View) -> None:
    """Arrows of x, y, z in the lower left corner of a view; an axis that points at the reader is left out."""
    size = 0.16 * min(view.half_width, view.half_height)
    corner = np.array([-view.half_width, -view.half_height]) + 0.75 * size
    for name, axis in zip("xyz", np.eye(3), strict=True):
        tip = size * np.array([axis @ view.right, axis @ view.up])
        if np.linalg.norm(tip) < 0.2 * size:
            continue
        arrow = {"arrowstyle": "-|>", "color": QUIET, "linewidth": 1.2, "shrinkA": 0, "shrinkB": 0}
        (x0, y0), (dx, dy) = corner.tolist(), tip.tolist()
        axes.annotate("", (x0 + dx, y0 + dy), (x0, y0), arrowprops=arrow, annotation_clip=False)
        axes.text(x0 + 1.28 * dx, y0 + 1.28 * dy, name, color=QUIET, ha="center", va="center", fontsize=10)
