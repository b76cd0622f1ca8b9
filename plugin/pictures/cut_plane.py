"""Level on planes through the model, sampled from the elements, with the outline of what the plane cuts.

The default planes go through the mean position of the receivers in the model, square to the three axes. Where the case
radiates, the field outside is shown around the model as far as its receivers. All planes of one picture share one scale of
colours and one scale of lengths.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.colors import Normalize
from matplotlib.figure import Figure
from matplotlib.ticker import MultipleLocator

from murmesh.plugin.describe import CONVENTION, hertz, is_density, level_unit, load_case_words, origin
from murmesh.plugin.fields import field_levels, kept_line
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.pictures.labels import receiver_dots
from murmesh.plugin.pictures.style import INK, LEVEL_MAP, Page, colour_bar, level_limits, look, page, save
from murmesh.plugin.sampling import Skin, sample_skin
from murmesh.solver.case.model import Case
from murmesh.solver.errors import ResultError
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
Vector = tuple[float, float, float]

_CELLS, _LEAST, _MOST = 250, 60, 1200  # along a cut's longer edge; at least along the shorter; at most along either
_CONTOUR = 5.0  # dB
_AROUND, _WITHIN = 50, 100  # cells along the longer edge, outside (each is an integral over what radiates) and in the model
_MARGIN, _FAR = 0.25, 1.5  # how far the field outside is shown: at least and, to reach receivers, at most, in model extents
_BESIDE = 1e-7  # of the model's longest extent
_NEAR = 0.05  # metres: a receiver farther from the plane is drawn hollow
BAR, _LABELS, _ABOVE, _UNDER = 1.35, 0.8, 0.35, 0.62  # inches: colour bar, room left of, above and below a cut
_MOST_HEIGHT = 9.0  # inches


@dataclass(frozen=True, eq=False)
class Plane:
    """A plane with its axes on the page; names of the axes as they are written there."""

    origin: Floats
    normal: Floats
    across: Floats
    up: Floats
    title: str
    axes: tuple[str, str]

    @classmethod
    def of(cls, origin: Vector, normal: Vector) -> Plane:
        """The plane through `origin` [m] square to `normal`; up is z, or y seen along z."""
        n = np.asarray(normal, dtype=np.float64)
        if not np.linalg.norm(n) > 0:
            raise ResultError(f"a cut needs a normal, got {tuple(normal)}; give a direction such as (0, 0, 1)")
        n = n / np.linalg.norm(n)
        at = np.asarray(origin, dtype=np.float64)
        axis = int(np.argmax(np.abs(n)))
        if np.abs(n[axis]) > 1 - 1e-12:
            i, j = [k for k in range(3) if k != axis]
            unit = np.eye(3)
            return cls(at, n, unit[i], unit[j], f"{'xyz'[axis]} = {at[axis]:.3g} m", ("xyz"[i], "xyz"[j]))
        across = np.cross([0.0, 0.0, 1.0], n)
        across = across / np.linalg.norm(across)
        where, which = (", ".join(f"{v:.3g}" for v in part) for part in (at, n))
        return cls(at, n, across, np.cross(n, across), f"through ({where}) m, normal ({which})", ("across", "up"))

    def flat(self, points: Floats) -> Floats:
        """Points (..., 3) on the plane's own axes (..., 2) [m]."""
        return np.asarray(self._shifted(points) @ np.stack([self.across, self.up], axis=1))

    def _shifted(self, points: Floats) -> Floats:
        # along coordinate axes the page shows the coordinates themselves
        aligned = self.axes != ("across", "up")
        return points - np.where(aligned, 0.0, self.origin)

    def place(self, flat: Floats) -> Floats:
        """Points (k, 3) in space of points (k, 2) on the page."""
        offset = self.flat(self.origin)
        return np.asarray(self.origin + (flat - offset) @ np.stack([self.across, self.up]))


@dataclass(frozen=True, eq=False)
class Layer:
    """Pressures (rows, columns, r) on a grid between two corners; nan where the layer holds nothing."""

    low: Floats
    high: Floats
    pressure: Complex

    @property
    def extent(self) -> tuple[float, float, float, float]:
        """Left, right, bottom, top."""
        return float(self.low[0]), float(self.high[0]), float(self.low[1]), float(self.high[1])

    @property
    def columns(self) -> Complex:
        """The pressures as (k, r)."""
        return self.pressure.reshape(-1, self.pressure.shape[2])


@dataclass(frozen=True, eq=False)
class Cut:
    """A plane, the outline of the fluid on it as segments (k, 2, 2), its corners, and its layers: around the model where it
    radiates, then the model, finer and drawn above."""

    plane: Plane
    outline: Floats
    low: Floats
    high: Floats
    layers: tuple[Layer, ...]

    @property
    def size(self) -> Floats:
        """Width and height [m]."""
        return self.high - self.low


@PICTURES.member("cut_plane", ".png", "level on planes through the receivers at one frequency")
def draw(
    result: Result,
    path: Path,
    *,
    frequency: float | None = None,
    load_case: str = "",
    planes: Sequence[tuple[Vector, Vector]] = (),
    limits: tuple[float, float] | None = None,
) -> Path:
    """Draw the field kept at `frequency` (None: the loudest at the receivers) on `planes`, (origin [m], normal) each.

    Raises ResultError if no field is kept there or a plane misses the fluid.
    """
    with look():
        return save(figure(result, frequency, load_case, planes, limits), path)


def figure(
    result: Result,
    frequency: float | None = None,
    load_case: str = "",
    planes: Sequence[tuple[Vector, Vector]] = (),
    limits: tuple[float, float] | None = None,
) -> Figure:
    """The figure, for further work."""
    line = kept_line(result, frequency, load_case)
    cuts = cuts_of(result, planes, line, load_case)
    levels = [[field_levels(result, layer.columns, load_case) for layer in cut.layers] for cut in cuts]
    every = np.concatenate([layer for of_cut in levels for layer in of_cut])
    scale = level_limits(every, limits)
    facts = [
        f"{hertz(line)} · no frequency weighting · highest on these planes {np.nanmax(every):.1f} dB",
        load_case_words(result.load_case_of(load_case)),
    ]
    outside = " Around the model: the field outside, by the integral over what radiates." if result.radiates else ""
    notes = [
        f"Sampled from the elements on a grid; contours every {_CONTOUR:.0f} dB. A hollow dot is a receiver more than "
        f"{1000 * _NEAR:.0f} mm off the plane.{outside}",
        f"Convention: {CONVENTION}. {origin(result)}.",
    ]
    layout = Arrangement.of(cuts)
    sheet = page("Sound pressure level on cut planes", facts, notes, layout.height)
    for (left, bottom), cut, values in zip(layout.corners, cuts, levels, strict=True):
        axes = sheet.axes(left, bottom, *(cut.size * layout.scale))
        _draw(axes, result.case, cut, values, scale, layout.scale)
    high = min(layout.height - 0.6, 4.2)
    bar = sheet.axes(sheet.width - BAR + 0.3, (layout.height - high) / 2, 0.24, high)
    colour_bar(bar, scale, f"level [{level_unit('Z', is_density(result, load_case))}]")
    return sheet.figure


def cuts_of(result: Result, planes: Sequence[tuple[Vector, Vector]], line: float, load_case: str) -> list[Cut]:
    """The field at a kept line on `planes`, or on the default ones."""
    skin = sample_skin(result.space, 0 if result.space.geometry.curved.any() else 1)
    return [_cut(result, skin, Plane.of(*plane), line, load_case) for plane in planes or default_planes(result.case)]


def default_planes(case: Case) -> list[tuple[Vector, Vector]]:
    """Square to x, y and z through the mean of the receivers in the model's box, or through the middle of that box."""
    low, high = case.mesh.nodes.min(axis=0), case.mesh.nodes.max(axis=0)
    points = np.array([receiver.position for receiver in case.receivers]).reshape(-1, 3)
    points = points[np.all((points > low) & (points < high), axis=1)]
    middle = points.mean(axis=0) if len(points) else (low + high) / 2
    x, y, z = (round(float(v), 9) + 0.0 for v in middle)
    return [((x, y, z), (1.0, 0.0, 0.0)), ((x, y, z), (0.0, 1.0, 0.0)), ((x, y, z), (0.0, 0.0, 1.0))]


@dataclass(frozen=True)
class Arrangement:
    """Where each cut goes: in a row or in a column, whichever shows them larger; `scale` is inches per metre."""

    scale: float
    height: float
    corners: tuple[tuple[float, float], ...]

    @classmethod
    def of(cls, cuts: Sequence[Cut]) -> Arrangement:
        size, free = np.array([cut.size for cut in cuts]), Page.full_width() - BAR
        count, room = len(cuts), _ABOVE + _UNDER
        row = min((free - count * _LABELS) / size[:, 0].sum(), (_MOST_HEIGHT - room) / size[:, 1].max())
        column = min((free - _LABELS) / size[:, 0].max(), (_MOST_HEIGHT - count * room) / size[:, 1].sum())
        if row >= column:
            lefts = _LABELS * np.arange(1, count + 1) + row * np.concatenate([[0], np.cumsum(size[:-1, 0])])
            return cls(row, float(row * size[:, 1].max() + room), tuple((float(x), _UNDER) for x in lefts))
        height = float(column * size[:, 1].sum() + count * room)
        tops = room * np.arange(count) + column * np.concatenate([[0], np.cumsum(size[:-1, 1])])
        bottoms = height - tops - _ABOVE - column * size[:, 1]
        return cls(column, height, tuple((_LABELS, float(y)) for y in bottoms))


def _cut(result: Result, skin: Skin, plane: Plane, frequency: float, load_case: str) -> Cut:
    segments = plane.flat(crossings(skin, plane.origin, plane.normal))
    if not len(segments):
        raise ResultError(f"the plane {plane.title} misses the fluid; choose another origin or normal")
    low, high = segments.min(axis=(0, 1)), segments.max(axis=(0, 1))
    size = high - low
    cells = _WITHIN if result.radiates else _CELLS
    step = max(min(size.max() / cells, size.min() / _LEAST), size.max() / _MOST)
    inside = _layer(result, plane, low, high, step, frequency, load_case, outside=False)
    if not result.radiates:
        return Cut(plane, segments, low, high, (inside,))
    low, high = _window(result.case, plane, low, high)
    around = _layer(result, plane, low, high, (high - low).max() / _AROUND, frequency, load_case)
    return Cut(plane, segments, low, high, (around, inside))


def _window(case: Case, plane: Plane, low: Floats, high: Floats) -> tuple[Floats, Floats]:
    """What of the outside a cut shows: a margin around the model, more where a receiver lies farther out."""
    extent = float((high - low).max())
    points = plane.flat(np.array([receiver.position for receiver in case.receivers]).reshape(-1, 3))
    reach = np.vstack([low, high, points])
    return (
        np.maximum(reach.min(axis=0), low - _FAR * extent) - _MARGIN * extent,
        np.minimum(reach.max(axis=0), high + _FAR * extent) + _MARGIN * extent,
    )


def _layer(
    result: Result, plane: Plane, low: Floats, high: Floats, step: float, line: float, load_case: str, *, outside: bool = True
) -> Layer:
    """The field in cells of about `step` [m] between two corners on a plane."""
    counts = np.maximum(np.ceil((high - low) / step), 2).astype(int)
    u, v = (low[k] + (np.arange(counts[k]) + 0.5) / counts[k] * (high - low)[k] for k in (0, 1))
    grid = np.stack(np.meshgrid(u, v), axis=-1)
    pressure = _sampled(result, plane, plane.place(grid.reshape(-1, 2)), line, load_case, outside=outside)
    return Layer(low, high, pressure.reshape(*grid.shape[:2], -1))


def _sampled(result: Result, plane: Plane, points: Floats, frequency: float, load_case: str, *, outside: bool) -> Complex:
    """Pressures (k, r) just beside a plane, where its normal points to; on the other side where that is no fluid.

    A plane that lies in a sheet would meet either side at random.
    """
    shift = _BESIDE * float(np.ptp(result.case.mesh.nodes, axis=0).max()) * plane.normal
    pressure = result.pressure_at(points + shift, frequency, load_case, outside=outside)
    missing = np.isnan(pressure[:, 0])
    if missing.any():
        pressure[missing] = result.pressure_at(points[missing] - shift, frequency, load_case, outside=outside)
    return pressure


def crossings(skin: Skin, origin: Floats, normal: Floats) -> Floats:
    """Segments (k, 2, 3) [m] in which a plane cuts the triangles of a skin."""
    height = (skin.cloud.points - origin) @ normal
    extent = float(np.ptp(skin.cloud.points, axis=0).max())
    height = np.where(np.abs(height) < 1e-9 * extent, 1e-9 * extent, height)  # a plane through nodes passes beside them
    h, x = height[skin.triangles], skin.cloud.points[skin.triangles]
    follow = [1, 2, 0]
    crosses = (h > 0) != (h[:, follow] > 0)
    part = np.divide(h, h - h[:, follow], out=np.zeros_like(h), where=crosses)
    at = x + part[:, :, None] * (x[:, follow] - x)
    hit = crosses.any(axis=1)
    return np.asarray(at[hit][crosses[hit]].reshape(-1, 2, 3))


def _tick(about: float) -> float:
    """The step of ticks [m], 1, 2 or 5 times a power of ten: the nearest to `about` that is not above it."""
    power = 10.0 ** np.floor(np.log10(about) + 1e-9)
    return float(max(m * power for m in (1, 2, 5) if m * power <= about * (1 + 1e-9)))


def _draw(
    axes: Axes, case: Case, cut: Cut, levels: Sequence[Floats], scale: tuple[float, float], scale_of_lengths: float
) -> None:
    steps = np.arange(scale[0], scale[1] + 0.1, _CONTOUR)
    for layer, values in zip(cut.layers, levels, strict=True):
        shown, extent = values.reshape(layer.pressure.shape[:2]), layer.extent
        axes.imshow(shown, origin="lower", extent=extent, cmap=LEVEL_MAP, norm=Normalize(*scale), interpolation="nearest")
        axes.contour(shown, steps, extent=extent, colors=INK, linewidths=0.5, alpha=0.45)
    axes.add_collection(LineCollection(list(cut.outline), colors=INK, linewidths=1.2, clip_on=False))
    frame_cut(axes, case, cut, scale_of_lengths)


def frame_cut(axes: Axes, case: Case, cut: Cut, scale_of_lengths: float) -> None:
    """Axes in metres, the title and the receivers of a cut; `scale_of_lengths` in inches per metre."""
    extent = (cut.low[0], cut.high[0], cut.low[1], cut.high[1])
    for side in axes.spines.values():
        side.set_visible(False)
    axes.set_xlabel(f"{cut.plane.axes[0]} [m]")
    axes.set_ylabel(f"{cut.plane.axes[1]} [m]")
    axes.set_title(cut.plane.title, loc="left", fontsize=11)
    axes.set_aspect("equal")
    for way, size in zip((axes.xaxis, axes.yaxis), cut.size, strict=True):
        way.set_major_locator(MultipleLocator(_tick(min(1.1 / scale_of_lengths, float(size)))))
    axes.set(xlim=extent[:2], ylim=extent[2:])
    _dots(axes, case, cut)


def _dots(axes: Axes, case: Case, cut: Cut) -> None:
    """The receivers that lie in front of or behind the cut."""
    points = np.array([receiver.position for receiver in case.receivers]).reshape(-1, 3)
    flat = cut.plane.flat(points)
    within = np.flatnonzero(np.all((flat >= cut.low) & (flat <= cut.high), axis=1))
    near = np.abs((points[within] - cut.plane.origin) @ cut.plane.normal) <= _NEAR
    receiver_dots(axes, [case.receivers[i] for i in within], flat[within], near.tolist())
