"""The far field of what radiates, in directions that cover the sphere (or the half space above a ground plane).

Level at 1 m: 10 lg( sum_r |F_r|^2 / 2 / (1 m * 20 uPa)^2 ); directivity index: what a direction has above the mean of all.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from murmesh.plugin.fields import field_levels
from murmesh.solver.errors import ResultError
from murmesh.solver.exterior import Outside
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
RANGE_DB = 40.0
RINGS = 24
"""Directions every 180/RINGS degrees."""


@dataclass(frozen=True, eq=False)
class Pattern:
    """Far field of one surface at one frequency: directions (m, 3) and triangles (k, 3) between them, levels (m,) [dB re 20
    uPa, at 1 m], directivity index (m,) [dB], the centre (3,), the radiated power [W] and the normal of a ground plane."""

    name: str
    frequency: float
    directions: Floats
    triangles: Ints
    level: Floats
    index: Floats
    centre: Floats
    power: float
    normal: Floats | None

    @property
    def radius(self) -> Floats:
        """1 at the loudest, 0 at RANGE_DB below it."""
        return np.asarray(np.maximum(1.0 + (self.level - self.level.max()) / RANGE_DB, 0.0))


def pattern(result: Result, frequency: float, load_case: str = "") -> tuple[Pattern, ...]:
    """The patterns of all surfaces that radiate. Raises ResultError where nothing does."""
    found = result.outside(frequency, load_case)
    if not found:
        raise ResultError("nothing radiates in this case, so it has no far field; give a surface the kind 'radiating'")
    return tuple(_pattern(result, outside, load_case) for outside in found)


def _pattern(result: Result, outside: Outside, load_case: str) -> Pattern:
    ground = outside.exterior.envelope.ground
    normal = None if ground is None else np.asarray(ground.normal, dtype=np.float64)
    directions, triangles = _directions(normal)
    level, index = levels(result, outside, directions, load_case)
    head = outside.name, outside.frequency, directions, triangles, level, index
    return Pattern(*head, np.asarray(outside.exterior.envelope.centre), outside.power, normal)


def levels(result: Result, outside: Outside, directions: Floats, load_case: str = "") -> tuple[Floats, Floats]:
    """Level at 1 m [dB re 20 uPa] and directivity index [dB] in directions (m, 3)."""
    return field_levels(result, outside.far_field(directions), load_case), outside.directivity_index(directions)


def _directions(normal: Floats | None) -> tuple[Floats, Ints]:
    """A grid of polar angle and azimuth about z or, above a ground plane, about its normal; and its triangles."""
    axis = np.array([0.0, 0.0, 1.0]) if normal is None else normal / np.linalg.norm(normal)
    other = np.eye(3)[int(np.argmin(np.abs(axis)))]
    across = np.cross(axis, other) / np.linalg.norm(np.cross(axis, other))
    rings, columns = (RINGS if normal is None else RINGS // 2), 2 * RINGS
    polar = np.linspace(0.0, np.pi if normal is None else np.pi / 2, rings + 1)[:, None]
    azimuth = 2 * np.pi * np.arange(columns)[None] / columns
    round_ = np.cos(azimuth)[..., None] * across + np.sin(azimuth)[..., None] * np.cross(axis, across)
    points = np.sin(polar)[..., None] * round_ + np.cos(polar)[..., None] * axis
    i, j = np.meshgrid(np.arange(rings), np.arange(columns), indexing="ij")
    a, b = i * columns + j, i * columns + (j + 1) % columns
    c, d = a + columns, b + columns
    quads = np.stack([np.stack([a, c, b], -1), np.stack([b, c, d], -1)], axis=2).reshape(-1, 3)
    return points.reshape(-1, 3), np.asarray(quads, dtype=np.int64)
