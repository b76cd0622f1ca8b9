"""A pump set in its enclosure, a gmsh model whose outside is left to the job's table [wrap]. All of it is invented.

    murmesh solve pump_set.toml                                 the job wraps the model in air and meshes it
    python -m murmesh.sample_geometry.pump_set pump_set.brep    the geometry alone

Axes: x along the set from motor to pump, y to the left, z up from the hard floor; metres. The enclosure, 0.90 x 0.60 x 0.62 m
inside, stands on the floor over a base frame with a motor and a pump. Its air opens to the outside through a bend: out through
the end wall, down along it to a mouth that looks at the floor. The walls are solid; a lining lies behind the surfaces drawn.
"""

from __future__ import annotations

import argparse
from collections.abc import Iterable

import gmsh

Box = tuple[float, float, float, float, float, float]
"""x, y, z of the lowest corner, then of the highest [m]."""

INSIDE: Box = (-0.45, -0.30, 0.00, 0.45, 0.30, 0.62)
OUTSIDE: Box = (-0.49, -0.34, 0.00, 0.49, 0.34, 0.66)
BEND: tuple[Box, Box] = ((0.45, -0.10, 0.36, 0.73, 0.10, 0.56), (0.53, -0.10, 0.18, 0.73, 0.10, 0.56))
BEND_OUTSIDE: Box = (0.49, -0.14, 0.18, 0.77, 0.14, 0.60)
MACHINE: dict[str, Box] = {
    "base": (-0.34, -0.16, 0.00, 0.32, 0.16, 0.08),
    "motor": (-0.28, -0.11, 0.08, 0.04, 0.11, 0.36),
    "pump": (0.04, -0.08, 0.08, 0.26, 0.08, 0.28),
}

ENCLOSURE_AIR, BEND_AIR, SHELL = "enclosure_air", "bend_air", "shell"
SURFACES = (*MACHINE, "enclosure_walls", "enclosure_roof", "bend_walls", "shell_outside")

_TOUCH = 1e-6


def build() -> None:
    """Build and tag the pump set in the current gmsh model, unmeshed and without the air around it.

    gmsh must be initialised, its current model empty. Adds the physical volumes `enclosure_air`, `bend_air` and `shell` (the
    enclosure's walls; solid unless a job fills them) and the physical surfaces named in `SURFACES`. The machine is solid.
    """
    occ = gmsh.model.occ
    inside, machine = _box(INSIDE), {name: _box(box) for name, box in MACHINE.items()}
    bend = occ.fuse([(3, _box(BEND[0]))], [(3, _box(BEND[1]))])[0][0][1]
    shell = occ.fuse([(3, _box(OUTSIDE))], [(3, _box(BEND_OUTSIDE))])[0][0][1]
    parts = [shell, inside, bend, *machine.values()]
    _, pieces = occ.fragment([(3, shell)], [(3, tag) for tag in parts[1:]])
    occ.synchronize()
    # later parts lie in earlier ones and own what they share with them
    owner = {
        tag: name for name, held in zip((SHELL, ENCLOSURE_AIR, BEND_AIR, *machine), pieces, strict=True) for _, tag in held
    }
    for name in (ENCLOSURE_AIR, BEND_AIR, SHELL):
        gmsh.model.addPhysicalGroup(3, [tag for tag, held in owner.items() if held == name], name=name)
    groups: dict[str, list[int]] = {}
    for _, tag in gmsh.model.getEntities(2):
        if name := _name(tag, {owner[int(volume)] for volume in gmsh.model.getAdjacencies(2, tag)[0]}):
            groups.setdefault(name, []).append(tag)
    for name in SURFACES:
        gmsh.model.addPhysicalGroup(2, groups[name], name=name)


def _box(box: Box) -> int:
    x, y, z, X, Y, Z = box
    return int(gmsh.model.occ.addBox(x, y, z, X - x, Y - y, Z - z))


def _name(surface: int, between: Iterable[str]) -> str:
    """The group of a surface, by the volumes that it bounds; none for the floor and between two volumes of air."""
    sides = set(between)
    height = gmsh.model.occ.getCenterOfMass(2, surface)[2]
    if height < _TOUCH or sides <= {ENCLOSURE_AIR, BEND_AIR}:
        return ""
    if sides == {SHELL}:
        return "shell_outside"
    if sides == {SHELL, BEND_AIR}:
        return "bend_walls"
    if sides == {SHELL, ENCLOSURE_AIR}:
        return "enclosure_roof" if abs(height - INSIDE[5]) < _TOUCH else "enclosure_walls"
    part = sides - {ENCLOSURE_AIR}
    return part.pop() if len(part) == 1 and ENCLOSURE_AIR in sides else ""


def main(argv: list[str] | None = None) -> None:
    """Write the geometry of the pump set."""
    if gmsh.isInitialized():  # run as a job's script: the caller wants the model
        build()
        return
    parser = argparse.ArgumentParser(prog="python -m murmesh.sample_geometry.pump_set", description=main.__doc__)
    parser.add_argument("path", nargs="?", default="pump_set.brep", metavar="OUT.brep")
    args = parser.parse_args(argv)
    gmsh.initialize(readConfigFiles=False, interruptible=False)
    try:
        gmsh.option.setNumber("General.Terminal", 0)
        build()
        gmsh.write(args.path)
    finally:
        gmsh.finalize()
    print(f"{args.path}: surfaces {', '.join(SURFACES)}; their names live in a model, not in this file")


if __name__ == "__main__":
    main()
