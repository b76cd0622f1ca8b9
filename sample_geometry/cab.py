"""The cab of a beet harvester, a gmsh model of 14 named panels around one volume of air. All of it is invented.

    python -m murmesh.sample_geometry.cab [--size 0.3] [cab.msh]

Axes: x forward, y to the operator's left, z up; the origin lies on the floor, in the middle of its rear edge; metres.
A floor of 1.70 x 1.50 m tapers to a roof of 1.45 x 1.40 m, 1.66 m above it. The seat block stands on the floor and the
side console leans against the right door: both are cut out of the air. All walls are plane, so first-order
tetrahedra follow the geometry exactly, whatever the order of the pressure on them.
"""

from __future__ import annotations

import argparse
from collections.abc import Callable
from dataclasses import dataclass

import gmsh

HEIGHT = 1.66
FLOOR_LENGTH, FLOOR_WIDTH = 1.70, 1.50
ROOF_REAR, ROOF_LENGTH, ROOF_WIDTH = 0.05, 1.45, 1.40  # the windscreen leans back by 0.20 m, the rear forward by 0.05 m

SEAT = (0.30, -0.25, 0.00, 0.80, 0.25, 0.90)  # x, y, z of the lowest corner, then of the highest
CONSOLE = (0.80, -FLOOR_WIDTH, 0.00, 1.30, -0.45, 0.45)  # reaches through the right wall, which cuts it off

WAIST = 0.75  # height of the lower edge of all glass
DOOR_REAR = 0.45  # x where the rear quarters end and the doors begin
FLOOR_SPLIT = 0.80  # x where the front floor begins: the front of the seat and the rear of the console

DEFAULT_SIZE = 0.30  # metres: 2.3 elements per wavelength at 500 Hz in air, for orders 4 to 6

# A seated operator's ears, 0.16 m apart: 0.35 m above the seat block, 0.41 m below the roof.
LEFT_EAR = (0.50, 0.08, 1.25)
RIGHT_EAR = (0.50, -0.08, 1.25)

AIR = "cabin_air"
RIGID = "seat"
PANELS = (
    "windscreen_upper",
    "windscreen_lower",
    "door_left_glass",
    "door_left_skin",
    "door_right_glass",
    "door_right_skin",
    "rear_quarter_left",
    "rear_quarter_right",
    "rear_glass",
    "rear_bulkhead",
    "roof",
    "floor_front",
    "floor_rear",
    "console",
)

_TOUCH = 1e-6  # metres within which a point lies on a plane
_Point = tuple[float, float, float]


@dataclass(frozen=True)
class _Wall:
    """One plane wall: how far a point is from it, and which panel lies at a point of it."""

    distance: Callable[[float, float, float], float]
    panel: Callable[[float, float, float], str]


def build(size: float = DEFAULT_SIZE) -> None:
    """Build, tag and mesh the cab in the current gmsh model, with first-order tetrahedra of edge `size` (m).

    gmsh must be initialised, its current model empty. Adds a physical volume `cabin_air`, 14 physical surfaces named in
    `PANELS`, and the physical surface `seat`; together they cover the boundary of the air once.
    """
    air = _air()
    _split_walls(air)
    gmsh.model.occ.synchronize()
    _tag()
    gmsh.model.mesh.setSize(gmsh.model.getEntities(0), size)
    gmsh.model.mesh.generate(3)
    gmsh.model.mesh.optimize("Netgen")


def write(path: str, size: float = DEFAULT_SIZE) -> int:
    """Write the meshed cab to `path`; returns the number of tetrahedra. Opens and closes its own gmsh session."""
    gmsh.initialize(readConfigFiles=False, interruptible=False)
    try:
        gmsh.option.setNumber("General.Terminal", 0)
        gmsh.model.add("cab")
        build(size)
        gmsh.write(path)
        return len(gmsh.model.mesh.getElementsByType(4)[0])
    finally:
        gmsh.finalize()


def main(argv: list[str] | None = None) -> None:
    """Write the cab as a gmsh mesh."""
    parser = argparse.ArgumentParser(prog="python -m murmesh.sample_geometry.cab", description=main.__doc__)
    parser.add_argument("--size", type=float, default=DEFAULT_SIZE, metavar="M", help="edge of the elements, metres")
    parser.add_argument("path", nargs="?", default="cab.msh", metavar="OUT.msh")
    args = parser.parse_args(argv)
    if gmsh.isInitialized():  # run as a job's script: the caller wants the model, at the size it has set
        largest = float(gmsh.option.getNumber("Mesh.MeshSizeMax"))
        build(largest if largest < FLOOR_LENGTH else args.size)
        return
    tetrahedra = write(args.path, args.size)
    print(f"{args.path}: {tetrahedra} tetrahedra, {len(PANELS)} panels, the rigid group '{RIGID}', the air '{AIR}'")


def _half_width(z: float) -> float:
    return (FLOOR_WIDTH + (ROOF_WIDTH - FLOOR_WIDTH) * z / HEIGHT) / 2


def _rear(z: float) -> float:
    return ROOF_REAR * z / HEIGHT


def _front(z: float) -> float:
    return FLOOR_LENGTH + (ROOF_REAR + ROOF_LENGTH - FLOOR_LENGTH) * z / HEIGHT


def _ring(z: float) -> list[_Point]:
    """The four corners of the horizontal section at height z, counter-clockwise from the right rear."""
    x0, x1, y = _rear(z), _front(z), _half_width(z)
    return [(x0, -y, z), (x1, -y, z), (x1, y, z), (x0, y, z)]


def _air() -> int:
    """The tapered volume without the seat and the console; returns its tag."""
    occ = gmsh.model.occ
    low = [occ.addPoint(*p) for p in _ring(0.0)]
    high = [occ.addPoint(*p) for p in _ring(HEIGHT)]
    after = (1, 2, 3, 0)
    floor = [occ.addLine(low[i], low[after[i]]) for i in range(4)]
    roof = [occ.addLine(high[i], high[after[i]]) for i in range(4)]
    posts = [occ.addLine(low[i], high[i]) for i in range(4)]
    sides = [[floor[i], posts[after[i]], roof[i], posts[i]] for i in range(4)]
    faces = [occ.addPlaneSurface([occ.addCurveLoop(curves)]) for curves in [floor, roof, *sides]]
    cab = occ.addVolume([occ.addSurfaceLoop(faces)])
    blocks = [occ.addBox(x, y, z, X - x, Y - y, Z - z) for x, y, z, X, Y, Z in (SEAT, CONSOLE)]
    [(_, air)], _ = occ.cut([(3, cab)], [(3, block) for block in blocks])
    return int(air)


def _split_walls(air: int) -> None:
    """Split the walls along the waist, the doors' rear posts and the floor's seam: lines drawn on the walls."""
    occ = gmsh.model.occ
    waist = _ring(WAIST)
    seams = [(waist[i], waist[(i + 1) % 4]) for i in range(4)]
    for side in (-1, 1):
        seams.append(((DOOR_REAR, side * FLOOR_WIDTH / 2, 0.0), (DOOR_REAR, side * ROOF_WIDTH / 2, HEIGHT)))
        seams.append(((FLOOR_SPLIT, 0.0, 0.0), (FLOOR_SPLIT, side * FLOOR_WIDTH / 2, 0.0)))
    lines = [(1, occ.addLine(occ.addPoint(*a), occ.addPoint(*b))) for a, b in seams]
    occ.fragment([(3, air)], lines)


def _side(side: str) -> Callable[[float, float, float], str]:
    def panel(x: float, y: float, z: float) -> str:
        if x < DOOR_REAR:
            return f"rear_quarter_{side}"
        return f"door_{side}_glass" if z > WAIST else f"door_{side}_skin"

    return panel


_WALLS = (
    _Wall(lambda x, y, z: z, lambda x, y, z: "floor_front" if x > FLOOR_SPLIT else "floor_rear"),
    _Wall(lambda x, y, z: HEIGHT - z, lambda x, y, z: "roof"),
    _Wall(lambda x, y, z: _front(z) - x, lambda x, y, z: "windscreen_upper" if z > WAIST else "windscreen_lower"),
    _Wall(lambda x, y, z: x - _rear(z), lambda x, y, z: "rear_glass" if z > WAIST else "rear_bulkhead"),
    _Wall(lambda x, y, z: _half_width(z) - y, _side("left")),
    _Wall(lambda x, y, z: _half_width(z) + y, _side("right")),
)


def _name_at(x: float, y: float, z: float) -> str:
    """The group of a boundary surface with its centre of mass here; what lies on no wall is seat or console."""
    for wall in _WALLS:
        if abs(wall.distance(x, y, z)) < _TOUCH:
            return wall.panel(x, y, z)
    return RIGID if y > CONSOLE[4] + _TOUCH else "console"


def _tag() -> None:
    """Name the air and its boundary by where each surface lies: booleans renumber them and drop every group."""
    volumes = gmsh.model.getEntities(3)
    groups: dict[str, list[int]] = {}
    for _, tag in gmsh.model.getBoundary(volumes, oriented=False):
        name = _name_at(*gmsh.model.occ.getCenterOfMass(2, tag))
        groups.setdefault(name, []).append(tag)
    for name in (*PANELS, RIGID):
        gmsh.model.addPhysicalGroup(2, groups[name], name=name)
    gmsh.model.addPhysicalGroup(3, [tag for _, tag in volumes], name=AIR)


if __name__ == "__main__":
    main()
