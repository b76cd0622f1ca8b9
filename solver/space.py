"""The discretised case: numbered unknowns, and every surface as sides of tetrahedra.

A *side* is the part of a surface that faces one region, as (tetrahedron, local face) pairs. An outer surface has sides on
its fluid; a sheet inside the fluid has sides in front and behind, because the numbering is opened along it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.csgraph import connected_components

from murmesh.solver.assembly import DofMap, Geometry, surface_area, surface_normals
from murmesh.solver.case.boundary import Boundary, Radiating, Sheet
from murmesh.solver.case.model import Case
from murmesh.solver.envelope import Envelope, Ground, envelope
from murmesh.solver.errors import MeshError
from murmesh.solver.orders import Wall, element_orders
from murmesh.solver.topology import Topology

Ints = npt.NDArray[np.int64]
Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Side:
    """Faces of one surface that look into one region; `sign` is -1 on the back of a sheet."""

    surface: int
    region: int
    boundary: Boundary
    tet: Ints
    face: Ints
    sign: int = 1


@dataclass(frozen=True)
class SheetPair:
    """The two sides of a sheet, face by face in the same order, within one pair of regions."""

    surface: int
    region: int
    front: tuple[Ints, Ints]
    back: tuple[Ints, Ints]


@dataclass(frozen=True, eq=False)
class Radiator:
    """A surface that radiates, or several that touch: their names, the region inside, and the infinite elements."""

    name: str
    surfaces: tuple[int, ...]
    region: int
    envelope: Envelope


@dataclass(frozen=True, eq=False)
class Space:
    """Geometry, numbering and sides; made by `discretise`."""

    case: Case
    order: int
    geometry: Geometry
    topology: Topology
    dofs: DofMap
    sides: tuple[Side, ...]
    sheets: tuple[SheetPair, ...]

    @property
    def walls(self) -> tuple[Wall, ...]:
        """Kind and area of every side."""
        return walls_of(self.geometry, self.sides)

    @cached_property
    def envelopes(self) -> tuple[Radiator, ...]:
        """What radiates, with its unknowns behind those of the mesh.

        Raises: MeshError where a surface is open, not star-shaped about its centre, or not closed by its ground plane.
        """
        found: list[Radiator] = []
        first = self.dofs.n_dofs
        for sides in _touching(self.sides, self.topology):
            found.append(_radiator(self, sides, first))
            first += found[-1].envelope.extra
        return tuple(found)

    @property
    def size(self) -> int:
        """Number of unknowns, those of the outside included."""
        return self.dofs.n_dofs + sum(outer.envelope.extra for outer in self.envelopes)

    def sides_of(self, surface: int) -> tuple[Side, ...]:
        """The sides of one surface."""
        return tuple(side for side in self.sides if side.surface == surface)


def discretise(case: Case, order: int = 0, orders: Ints | None = None) -> Space:
    """Number the unknowns of `case`: `orders` (t,) per element, or a uniform `order`, or that of its sweep, or the rule's.

    The rule of `orders.element_orders` looks at the highest frequency of the sweep; `order` of a space is its highest.
    """
    mesh = case.mesh
    sheets = [i for i, surface in enumerate(case.surfaces) if isinstance(surface.boundary, Sheet)]
    try:
        topology = Topology.build(mesh.tets, mesh.triangles[np.isin(mesh.triangle_surface, sheets)][:, :3])
    except MeshError as error:
        raise MeshError(
            f"surfaces/{', '.join(case.surfaces[i].name for i in sheets)}: {error}" if sheets else str(error)
        ) from None
    geometry = Geometry(mesh.nodes, mesh.tets)
    sides, pairs = _all_sides(case, topology, geometry)
    if orders is None:
        uniform = order or case.sweep.order
        orders = np.full(len(mesh.tets), uniform) if uniform else element_orders(case, topology, walls_of(geometry, sides))
    dofs = DofMap.build(topology, orders)
    return Space(case, dofs.max_order, geometry, topology, dofs, sides, pairs)


def walls_of(geometry: Geometry, sides: Iterable[Side]) -> tuple[Wall, ...]:
    """Kind and area of every side, as the rule of orders wants them."""
    return tuple(Wall(side.region, side.boundary, surface_area(geometry, side.tet, side.face)) for side in sides)


def _touching(sides: tuple[Side, ...], topology: Topology) -> list[list[Side]]:
    """Radiating sides of one region and one declaration, each group joined by common vertices."""
    left = [side for side in sides if side.boundary.radiates]
    groups = []
    for region, boundary in dict.fromkeys((side.region, side.boundary) for side in left):
        members = [side for side in left if (side.region, side.boundary) == (region, boundary)]
        tet, face = (np.concatenate(part) for part in zip(*((s.tet, s.face) for s in members), strict=True))
        surface = np.repeat([s.surface for s in members], [len(s.tet) for s in members])
        for part in _connected(topology, tet, face):
            named = np.unique(surface[part])
            groups.append([Side(int(s), region, boundary, *(a[part[surface[part] == s]] for a in (tet, face))) for s in named])
    return groups


def _connected(topology: Topology, tet: Ints, face: Ints) -> list[Ints]:
    """Positions of faces, group by group of those that share vertices."""
    kept = topology.sorted_vertices[tet] != face[:, None]
    vertices = topology.tet_vertex_ids[tet][kept].reshape(-1, 3)
    rows = np.repeat(np.arange(len(tet)), 3)
    shape = (len(tet), topology.n_vertices)
    touches = sp.csr_matrix((np.ones(vertices.size, dtype=np.int64), (rows, vertices.ravel())), shape=shape)
    count, label = connected_components(touches @ touches.T, directed=False)
    return [np.flatnonzero(label == i) for i in range(count)]


def _radiator(space: Space, sides: list[Side], first: int) -> Radiator:
    """The infinite elements on touching sides; MeshError naming the surfaces."""
    case, boundary = space.case, sides[0].boundary
    assert isinstance(boundary, Radiating)
    name = "+".join(case.surfaces[side.surface].name for side in sides)
    tet, face = (np.concatenate(part) for part in zip(*((s.tet, s.face) for s in sides), strict=True))
    top = case.sweep.frequencies[-1:]
    k = float(2 * np.pi * top[0] / case.regions[sides[0].region].medium.c(top)[0].real)
    ground = None if boundary.ground == "none" else Ground.of(boundary.ground_normal, 1 if boundary.ground == "rigid" else -1)
    try:
        outer = envelope(
            space.geometry,
            space.dofs,
            (tet, face),
            centre=boundary.centre,
            radial=boundary.radial_functions,
            k=k,
            ground=ground,
            first=first,
        )
    except MeshError as error:
        raise MeshError(f"surfaces/{name}: {error}") from None
    return Radiator(name, tuple(side.surface for side in sides), sides[0].region, outer)


def _all_sides(case: Case, topology: Topology, geometry: Geometry) -> tuple[tuple[Side, ...], tuple[SheetPair, ...]]:
    sides: list[Side] = []
    sheets: list[SheetPair] = []
    for index, surface in enumerate(case.surfaces):
        triangles = case.mesh.triangles[case.mesh.triangle_surface == index]
        if not len(triangles):
            continue
        try:
            tet, face = topology.sides_of(triangles)
        except MeshError as error:
            raise MeshError(f"surfaces/{surface.name}: {error}") from None
        if isinstance(surface.boundary, Sheet):
            tet, face = _front_first(case, geometry, surface.boundary, triangles, tet, face, surface.name)
            sheets += _sheet_pairs(case, index, tet, face)
        sides += _split(case, index, surface.boundary, tet, face)
    return tuple(sides), tuple(sheets)


def _split(case: Case, index: int, boundary: Boundary, tet: Ints, face: Ints) -> list[Side]:
    """One side per region (and per face of a sheet); an inner surface that is no sheet is only an interface."""
    if not isinstance(boundary, Sheet) and np.any(tet[:, 1] >= 0):
        name = case.surfaces[index].name
        raise MeshError(
            f"surfaces/{name}: {int(np.sum(tet[:, 1] >= 0))} of its triangles lie inside the fluid, but its kind is "
            f"'{boundary.kind_name}', which needs fluid on one side only; make it a sheet, or take it out of the job"
        )
    sides = []
    for column, kind in enumerate(boundary.sides):
        regions = case.mesh.tet_region[tet[:, column]]
        for region in np.unique(regions):
            inside = regions == region
            sides.append(Side(index, int(region), kind, tet[inside, column], face[inside, column], -1 if column else 1))
    return sides


def _front_first(
    case: Case, geometry: Geometry, sheet: Sheet, triangles: Ints, tet: Ints, face: Ints, name: str
) -> tuple[Ints, Ints]:
    """Swap columns so that column 0 is the front: the side whose fluid lies where the front looks."""
    if sheet.front_region is not None:
        front = [region.name for region in case.regions].index(sheet.front_region)
        swap = case.mesh.tet_region[tet[:, 0]] != front
        if np.any(case.mesh.tet_region[np.where(swap, tet[:, 1], tet[:, 0])] != front):
            raise MeshError(f"surfaces/{name}: part of the sheet does not touch its front_region '{sheet.front_region}'")
    else:
        # the front side's outward normal points through the sheet, away from where the front looks
        outward = surface_normals(geometry, tet[:, 0], face[:, 0])
        if sheet.front_direction is not None:
            looks = np.broadcast_to(np.asarray(sheet.front_direction), outward.shape)
        else:
            a, b, c = (case.mesh.nodes[triangles[:, i]] for i in range(3))
            looks = np.cross(b - a, c - a)
        along = np.einsum("ij,ij->i", outward, looks)
        swap = along > 0
        if _front_matters(case, sheet, name):
            front_looks = np.where(swap[:, None], outward, -outward)
            _require_one_front(case, triangles, front_looks, name, sideways=bool(np.all(np.abs(along) < 1e-6)))
    flipped = np.where(swap[:, None], tet[:, ::-1], tet), np.where(swap[:, None], face[:, ::-1], face)
    return flipped


def _front_matters(case: Case, sheet: Sheet, name: str) -> bool:
    """Whether exchanging front and back would change anything."""
    loaded = any(load.acts_on == name for load_case in case.load_cases for load in load_case.loads)
    return loaded or not all(side.hard for side in sheet.sides)


def _require_one_front(case: Case, triangles: Ints, looks: Floats, name: str, sideways: bool) -> None:
    """Neighbours whose fronts look the same way run through their common edge in opposite directions."""
    a, b, c = (case.mesh.nodes[triangles[:, i]] for i in range(3))
    turn = np.einsum("ij,ij->i", np.cross(b - a, c - a), looks) < 0
    corners = np.where(turn[:, None], triangles[:, [0, 2, 1]], triangles[:, :3])
    runs = corners[:, [[0, 1], [1, 2], [2, 0]]].reshape(-1, 2)
    _, edge, count = np.unique(np.sort(runs, axis=1), axis=0, return_inverse=True, return_counts=True)
    forward = np.bincount(edge.ravel(), weights=runs[:, 0] < runs[:, 1])
    mixed = int(np.count_nonzero((count == 2) & (forward != 1)))
    if mixed or sideways:
        what = f"changes sides along {mixed} of its edges" if mixed else "cannot be told from its front_direction"
        raise MeshError(
            f"surfaces/{name}: the front of the sheet {what}, so a motion or the kinds of its sides would be mixed up; "
            "give front_region, or a front_direction that all of it faces, or orient its triangles alike"
        )


def _sheet_pairs(case: Case, index: int, tet: Ints, face: Ints) -> list[SheetPair]:
    regions = case.mesh.tet_region[tet[:, 0]]
    pairs = []
    for region in np.unique(regions):
        inside = regions == region
        front, back = ((tet[inside, c], face[inside, c]) for c in (0, 1))
        pairs.append(SheetPair(index, int(region), front, back))
    return pairs
