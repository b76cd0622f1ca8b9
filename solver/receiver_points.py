"""Where the pressure is read: receivers as sample points inside elements.

A receiver with a radius is sampled at its centre and at the six points of the sphere on the axes, with weights that
average cubic functions over the ball exactly: 2/5 at the centre, 1/10 at each of the others (the mean of r^2 over a ball
is 3/5 of its radius squared, and the octahedron is a spherical 3-design).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from murmesh.solver.assembly import Geometry
from murmesh.solver.case.model import Case, Receiver
from murmesh.solver.errors import CaseError

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Samples:
    """Sample points of all receivers: `receiver` (s,) index, `weight` (s,) summing to 1 per receiver, and their places."""

    receiver: Ints
    weight: Floats
    points: Floats
    tet: Ints
    bary: Floats


def sphere_points(receiver: Receiver) -> tuple[Floats, Floats]:
    """Sample points (s, 3) and weights (s,) of one receiver."""
    centre = np.array([receiver.position])
    if receiver.radius == 0.0:
        return centre, np.ones(1)
    axes = receiver.radius * np.vstack([np.eye(3), -np.eye(3)])
    return np.vstack([centre, centre + axes]), np.concatenate([[0.4], np.full(6, 0.1)])


def locate_receivers(case: Case, geometry: Geometry) -> Samples:
    """Find every receiver's samples in the mesh, -1 for those outside of it where a surface radiates; CaseError with the
    nearest point for one that lies outside where none does."""
    groups = [sphere_points(receiver) for receiver in case.receivers]
    points = np.vstack([group[0] for group in groups]) if groups else np.empty((0, 3))
    index = np.repeat(np.arange(len(groups)), [len(group[1]) for group in groups]).astype(np.int64)
    weights = np.concatenate([group[1] for group in groups]) if groups else np.empty(0)
    tet, bary = geometry.locate(points) if len(points) else (np.empty(0, np.int64), np.empty((0, 4)))
    if not any(surface.boundary.radiates for surface in case.surfaces):
        for sample in np.flatnonzero(tet < 0):
            raise not_in_fluid(case.receivers[index[sample]], points[sample], geometry)
    return Samples(index, weights, points, tet, bary)


def not_in_fluid(receiver: Receiver, at: Floats, geometry: Geometry) -> CaseError:
    """What to say of a sample that lies in no fluid."""
    near = geometry.nearest_point(at)
    what = "lies" if receiver.radius == 0 else f"with its averaging sphere of {receiver.radius:g} m reaches"
    return CaseError(
        f"receiver '{receiver.name}' {what} outside every region at ({at[0]:.4g}, {at[1]:.4g}, {at[2]:.4g}) m; the "
        f"nearest point of the fluid is ({near[0]:.4g}, {near[1]:.4g}, {near[2]:.4g}) m"
    )
