"""A model wrapped in air up to an ellipsoid, or to a dome on the ground, whose surface can be given the kind `radiating`.

    (x - c)_i = t (h_i + g) u_i,  |u| = 1          h half extents of the model's box, g the gap, t the least factor for which
                                                   every point of the model keeps the distance g to the surface

In a script, between the geometry and the mesh:

    found = wrap(gap=0.2, ground=0.0)              surface group "outside", its air "outside_air", the plane "ground"

and in a job the table [wrap] with the same keys. Volumes in a physical group are air and stay; those in none are solid and
are cut out, and so are groups named as `solid`. Where air of the model meets that outside, the two are joined: an opening.
Physical groups survive, though boolean operations drop them: copies of their entities are carried through the operation.
"""

from __future__ import annotations

import fnmatch
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from murmesh.plugin.gmsh_session import current_gmsh, group_name
from murmesh.solver.case.fields import Declared, quantity, record
from murmesh.solver.errors import CaseError, FieldError, MeshError, nearest

Floats = npt.NDArray[np.float64]
Entity = tuple[int, int]
"""Dimension and tag."""
_SAMPLES = 25
"""Points along a curve, and along either side of a curved surface: 0.2 % of a circle's radius lies beyond its chords."""
_TOUCH = 1e-6
"""Part of the model's size within which a point counts as on the ground."""
_ALONG = {"x": (1, 2, 0), "y": (2, 0, 1), "z": (0, 1, 2)}
"""The two axes along the ground and the one that points up."""


@record
class Wrap(Declared):
    """Wrap the geometry in air up to an ellipsoid or, on a ground plane, half of one; its surface may be `radiating`."""

    gap: float = quantity(help="least distance between the model and the outer surface", unit="m", positive=True)
    shape: str = quantity(
        help="'ellipsoid' with the proportions of the model, or 'sphere'", choices=("ellipsoid", "sphere"), default="ellipsoid"
    )
    ground: float | None = quantity(
        help="height of the ground plane, on which a dome then ends (default: no ground, a closed surface)",
        unit="m",
        default=None,
    )
    up: str = quantity(help="the axis square to the ground, which points to the air", choices=("x", "y", "z"), default="z")
    size: float | None = quantity(
        help="element size on the outer surface (default: that of the mesh)", unit="m", positive=True, default=None
    )
    name: str = quantity(help="surface group for the outer surface", default="outside")
    air: str = quantity(help="volume group for the air around the model", default="outside_air")
    floor: str = quantity(help="surface group for the ground, where no other group holds it", default="ground")
    solid: tuple[str, ...] = quantity(help="volume groups (names or globs) that are no air and are cut out too", default=())

    def validate(self) -> None:
        if self.name == self.floor or not (self.name and self.air and self.floor):
            raise FieldError(
                f"the groups are called name = '{self.name}', air = '{self.air}', floor = '{self.floor}'; give three "
                "names, those of the two surfaces different"
            )


@dataclass(frozen=True)
class Ellipsoid:
    """Centre [m] and half axes [m] along x, y, z."""

    centre: tuple[float, float, float]
    axes: tuple[float, float, float]


@dataclass(frozen=True)
class Wrapped:
    """What was put around a model: its shape, and the tags of the outer surface and of the air in between."""

    ellipsoid: Ellipsoid
    surfaces: tuple[int, ...]
    volumes: tuple[int, ...]


def wrap(gap: float, *, scale: float = 1.0, **options: Any) -> Wrapped:
    """Wrap the current gmsh model, one unit of which is `scale` metres, before it is meshed; options of `Wrap`, in metres.

    Raises FieldError, CaseError and MeshError as `wrap_model`.
    """
    return wrap_model(Wrap(gap, **options), scale)


def wrap_model(wanted: Wrap, scale: float = 1.0) -> Wrapped:
    """Wrap the current gmsh model; a mesh that it holds is dropped.

    Raises MeshError where the model is no OpenCASCADE geometry, CaseError where it crosses the ground or a group is not there.
    """
    gmsh = current_gmsh()
    gmsh.model.mesh.clear()
    _require_geometry(gmsh)
    groups = _groups(gmsh)
    _require_free(groups, wanted)
    solids = _solids(gmsh, groups, wanted.solid)
    shape = ellipsoid(scale * _points(gmsh), wanted)
    sizes = _sizes(gmsh)
    pieces = _joined(gmsh, groups, _hull(gmsh, shape, wanted, scale))
    volumes = _outer_air(gmsh, pieces, solids)
    named = _named(gmsh, groups, pieces, volumes, wanted)
    gmsh.model.removePhysicalGroups()
    for (dim, name), (number, tags) in named.items():
        gmsh.model.addPhysicalGroup(dim, tags, number, name=name)
    surfaces = named[2, wanted.name][1]
    _set_sizes(gmsh, sizes, surfaces, None if wanted.size is None else wanted.size / scale)
    return Wrapped(shape, tuple(surfaces), tuple(volumes))


# ---------------------------------------------------------------------------------------------------------------------
# the shape


def ellipsoid(points: Floats, wanted: Wrap) -> Ellipsoid:
    """The ellipsoid that keeps `wanted.gap` to points (n, 3) [m]; about a point of the ground, if there is one.

    Raises CaseError where points lie below the ground.
    """
    low, high = points.min(axis=0), points.max(axis=0)
    centre, half = (low + high) / 2, (high - low) / 2
    if wanted.ground is not None:
        up = _ALONG[wanted.up][2]
        _require_above(points, wanted, up)
        centre[up], half[up] = wanted.ground, high[up] - wanted.ground
    half = np.full(3, half.max()) if wanted.shape == "sphere" else half
    axes = _least_factor(points - centre, half + wanted.gap, wanted.gap) * (half + wanted.gap)
    x, y, z = (float(v) for v in centre)
    a, b, c = (float(v) for v in axes)
    return Ellipsoid((x, y, z), (a, b, c))


def _least_factor(x: Floats, axes: Floats, gap: float) -> float:
    """t = max |(x + g d) / a| over points x and directions |d| = 1; ascent, as the function of d is convex."""
    d = x / axes**2
    for _ in range(30):
        d = d / np.maximum(np.linalg.norm(d, axis=1, keepdims=True), 1e-300)
        reach = x + gap * d
        d = reach / axes**2
    return float(np.linalg.norm(reach / axes, axis=1).max())


def _require_above(points: Floats, wanted: Wrap, up: int) -> None:
    assert wanted.ground is not None
    lowest = points[np.argmin(points[:, up])]
    depth = wanted.ground - float(lowest[up])
    if depth > _TOUCH * float(np.ptp(points, axis=0).max()):
        where = ", ".join(f"{v:.4g}" for v in lowest)
        raise CaseError(
            f"wrap: the model reaches {depth:.3g} m below the ground plane {wanted.up} = {wanted.ground:g} m, at ({where}) m; "
            "expected it on the plane or above: move the model up, cut it at the plane, or give the height of the ground"
        )


def _hull(gmsh: Any, shape: Ellipsoid, wanted: Wrap, scale: float) -> Entity:
    """The whole ellipsoid, or its upper half, as a volume in the model's own unit."""
    occ = gmsh.model.occ
    lowest = -np.pi / 2 if wanted.ground is None else 0.0
    hull = (3, occ.addSphere(0, 0, 0, 1, -1, lowest))
    matrix = np.eye(4)
    matrix[:3, :3] = np.diag(shape.axes)[:, _ALONG[wanted.up]] / scale
    matrix[:3, 3] = np.asarray(shape.centre) / scale
    occ.affineTransform([hull], matrix.ravel().tolist())
    occ.synchronize()
    return hull


# ---------------------------------------------------------------------------------------------------------------------
# the model as it was


def _require_geometry(gmsh: Any) -> None:
    entities = gmsh.model.getEntities(3) or gmsh.model.getEntities(2)
    if not entities:
        raise MeshError("wrap: the current gmsh model holds no volume and no surface; build or open a geometry first")
    if set(entities) - set(gmsh.model.occ.getEntities()):
        raise MeshError(
            "wrap: the model is a mesh or built with gmsh's own kernel, which cannot be cut; expected OpenCASCADE geometry: "
            'use SetFactory("OpenCASCADE") or gmsh.model.occ, or give the STEP file'
        )


def _groups(gmsh: Any) -> dict[Entity, tuple[str, list[int]]]:
    """Name and entities of every physical group, by its dimension and number."""
    return {
        (dim, number): (
            group_name(gmsh, dim, number),
            [int(tag) for tag in gmsh.model.getEntitiesForPhysicalGroup(dim, number)],
        )
        for dim, number in gmsh.model.getPhysicalGroups()
    }


def _require_free(groups: Mapping[Entity, tuple[str, list[int]]], wanted: Wrap) -> None:
    if any(dim == 2 and name == wanted.name for (dim, _), (name, _) in groups.items()):
        raise CaseError(
            f"wrap: the model already has a surface group '{wanted.name}'; wrap it once, or give the outer surface "
            "another name"
        )


def _solids(gmsh: Any, groups: Mapping[Entity, tuple[str, list[int]]], patterns: Iterable[str]) -> set[int]:
    """Volumes that are cut out: those in no group, and those in groups that a pattern names."""
    held = {name: set(tags) for (dim, _), (name, tags) in groups.items() if dim == 3}
    solid = {tag for _, tag in gmsh.model.getEntities(3)}.difference(*held.values())
    for pattern in patterns:
        found = [tags for name, tags in held.items() if fnmatch.fnmatchcase(name, pattern)]
        if not found:
            raise CaseError(f"wrap: no volume group matches solid = '{pattern}'; {nearest(pattern, held)}")
        solid.update(*found)
    return solid


def _points(gmsh: Any) -> Floats:
    """Points (n, 3) that span the model, on curves and curved surfaces; a plane surface reaches no further than its rim."""
    part = np.linspace(0.0, 1.0, _SAMPLES)
    found = [np.asarray(gmsh.model.getValue(0, tag, []), dtype=np.float64) for _, tag in gmsh.model.getEntities(0)]
    for _, tag in gmsh.model.getEntities(1):
        (low,), (high,) = gmsh.model.getParametrizationBounds(1, tag)
        found.append(np.asarray(gmsh.model.getValue(1, tag, low + (high - low) * part)))
    for _, tag in gmsh.model.getEntities(2):
        if gmsh.model.getType(2, tag) != "Plane":
            low, high = (np.asarray(bound) for bound in gmsh.model.getParametrizationBounds(2, tag))
            grid = low + (high - low) * np.stack(np.meshgrid(part, part), axis=-1).reshape(-1, 2)
            inside = [uv for uv in grid if gmsh.model.isInside(2, tag, uv, parametric=True)]
            found.append(np.asarray(gmsh.model.getValue(2, tag, np.ravel(inside))))
    return np.concatenate(found).reshape(-1, 3)


def _sizes(gmsh: Any) -> dict[tuple[float, ...], float]:
    """Element sizes that the model states, by the place of their points."""
    points = gmsh.model.getEntities(0)
    stated = zip(points, gmsh.model.mesh.getSizes(points), strict=True)
    return {_place(gmsh, tag): float(size) for (_, tag), size in stated if size > 0}


def _place(gmsh: Any, tag: int) -> tuple[float, ...]:
    return tuple(float(f"{v:.6g}") for v in gmsh.model.getValue(0, tag, []))


# ---------------------------------------------------------------------------------------------------------------------
# the operation


@dataclass(frozen=True)
class _Pieces:
    """What became of the hull, its faces and every entity of the model, as tags by the former dimension and tag."""

    hull: Entity
    curved: tuple[Entity, ...]
    ground: tuple[Entity, ...]
    of: Mapping[Entity, tuple[int, ...]]

    def those_of(self, entities: Iterable[Entity]) -> set[int]:
        """Tags of what became of several entities."""
        return {piece for entity in entities for piece in self.of[entity]}

    def model_volumes(self) -> dict[int, tuple[int, ...]]:
        """The pieces of the model's own volumes."""
        return {tag: found for (dim, tag), found in self.of.items() if dim == 3 and (dim, tag) != self.hull}


def _joined(gmsh: Any, groups: Mapping[Entity, tuple[str, list[int]]], hull: Entity) -> _Pieces:
    """Model and hull in pieces that share their surfaces.

    gmsh tells what became of its arguments, but not of the surfaces that bound them: copies of those go in as arguments.
    """
    faces = gmsh.model.getBoundary([hull], oriented=False)
    ground = tuple(face for face in faces if _flat(gmsh, face))
    volumes = [entity for entity in gmsh.model.getEntities(3) if entity != hull]
    named = [(dim, tag) for (dim, _), (_, tags) in groups.items() if dim < 3 for tag in tags]
    tracked = list(
        dict.fromkeys([*faces, *named, *((2, tag) for _, tag in gmsh.model.getEntities(2) if _loose(gmsh, 2, tag))])
    )
    tools = [*volumes, *(entity if _loose(gmsh, *entity) else gmsh.model.occ.copy([entity])[0] for entity in tracked)]
    try:
        _, found = gmsh.model.occ.fragment([hull], tools)
    except Exception as error:
        raise MeshError(
            f"wrap: gmsh cannot join the model and the air around it: {error}; heal the geometry (intersecting or open "
            "surfaces), or choose another gap"
        ) from None
    gmsh.model.occ.synchronize()
    became = (tuple(tag for dim, tag in pieces if dim == old[0]) for old, pieces in zip([hull, *tools], found, strict=True))
    return _Pieces(hull, tuple(set(faces) - set(ground)), ground, dict(zip([hull, *volumes, *tracked], became, strict=True)))


def _flat(gmsh: Any, face: Entity) -> bool:
    """Whether a face of the hull is that on the ground; the transformed disc is no plane to gmsh any more."""
    extent = np.ptp(np.reshape(gmsh.model.getBoundingBox(*face), (2, 3)), axis=0)
    return bool(extent.min() < 1e-4 * extent.max())


def _loose(gmsh: Any, dim: int, tag: int) -> bool:
    """Whether an entity bounds nothing: a thin surface, a line or point drawn by itself."""
    return not len(gmsh.model.getAdjacencies(dim, tag)[0])


def _outer_air(gmsh: Any, pieces: _Pieces, solids: set[int]) -> list[int]:
    """Remove solids and sealed cavities; the tags of the air between model and hull."""
    own = pieces.model_volumes()
    solid = {piece for tag in solids for piece in own[tag]}
    model_air = {piece for tag in own.keys() - solids for piece in own[tag]} - solid
    around = set(pieces.of[pieces.hull]).difference(*own.values())
    reached = _reached(gmsh, around | model_air, pieces.those_of(pieces.curved))
    gmsh.model.occ.remove([(3, tag) for tag in solid | (around - reached)], recursive=True)
    gmsh.model.occ.synchronize()
    return sorted(around & reached)


def _reached(gmsh: Any, air: set[int], front: Iterable[int]) -> set[int]:
    """Volumes of `air` to which sound comes from the surfaces `front`, through surfaces that two volumes share."""
    walls = {tag: {int(t) for t in gmsh.model.getAdjacencies(3, tag)[1]} for tag in air}
    met, reached = set(front), set[int]()
    while new := {tag for tag in air - reached if walls[tag] & met}:
        reached |= new
        met.update(*(walls[tag] for tag in new))
    return reached


Named = dict[tuple[int, str], tuple[int, list[int]]]
"""Number (-1: the next free) and entities of physical groups, by dimension and name."""


def _named(
    gmsh: Any, groups: Mapping[Entity, tuple[str, list[int]]], pieces: _Pieces, volumes: list[int], wanted: Wrap
) -> Named:
    """The model's groups on what is left of them, the outer surface, the air around and the ground."""
    named: Named = {}
    for (dim, number), (name, tags) in groups.items():
        left = {tag for _, tag in gmsh.model.getEntities(dim)}
        found = sorted({piece for tag in tags for piece in pieces.of.get((dim, tag), ())} & left)
        if found:
            named[dim, name] = (number, found)
    left = {tag for _, tag in gmsh.model.getEntities(2)}
    taken = {tag for (dim, _), (_, tags) in named.items() if dim == 2 for tag in tags}
    outer, ground = pieces.those_of(pieces.curved) & left, pieces.those_of(pieces.ground) & left - taken
    for key, new in {(2, wanted.name): outer, (2, wanted.floor): ground, (3, wanted.air): set(volumes)}.items():
        number, held = named.get(key, (-1, []))
        if new:
            named[key] = (number, sorted(new.union(held)))
    return named


def _set_sizes(gmsh: Any, sizes: Mapping[tuple[float, ...], float], surfaces: Iterable[int], size: float | None) -> None:
    """State the element sizes again at the points they stood at, and `size` on the outer surface."""
    for _, tag in gmsh.model.getEntities(0):
        if (stated := sizes.get(_place(gmsh, tag))) is not None:
            gmsh.model.mesh.setSize([(0, tag)], stated)
    if size is not None:
        rim = gmsh.model.getBoundary([(2, tag) for tag in surfaces], combined=False, oriented=False, recursive=True)
        gmsh.model.mesh.setSize(rim, size)
