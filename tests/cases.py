"""Small cases for tests: a mesh of `meshes.py`, one region, kinds by surface name."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import numpy as np

from meshes import TestMesh
from murmesh.solver.case.boundary import Boundary, Rigid
from murmesh.solver.case.load import Load, LoadCase, Monopole
from murmesh.solver.case.medium import Damping, GivenFluid, LossFactor, Medium, NoDamping
from murmesh.solver.case.model import Case, Mesh, Receiver, Region, Surface, Sweep

AIR = GivenFluid(density=1.21, speed=343.0)
RHO_C = 1.21 * 343.0


def case_of(
    mesh: TestMesh,
    kinds: Mapping[str, Boundary],
    loads: Sequence[Load] | LoadCase,
    frequencies: Iterable[float],
    receivers: Mapping[str, tuple[float, float, float]],
    *,
    medium: Medium = AIR,
    damping: Damping | None = None,
    regions: Sequence[Region] = (),
    tet_region: Any = None,
    **sweep: Any,
) -> Case:
    """A case on a test mesh; surfaces not named in `kinds` are rigid."""
    names = list(mesh.surfaces)
    triangles = np.concatenate([mesh.surfaces[name] for name in names])
    index = np.repeat(np.arange(len(names)), [len(mesh.surfaces[name]) for name in names])
    if tet_region is None:
        tet_region = np.zeros(len(mesh.tets), dtype=np.int64)
    return Case(
        mesh=Mesh(mesh.nodes, mesh.tets, tet_region, triangles, index),
        regions=tuple(regions) or (Region("air", medium, damping or NoDamping()),),
        surfaces=tuple(Surface(name, kinds.get(name, Rigid())) for name in names),
        sweep=Sweep(np.asarray(sorted(frequencies), dtype=np.float64), **sweep),
        load_cases=(loads if isinstance(loads, LoadCase) else LoadCase("test", tuple(loads), spectrum="tones"),),
        receivers=tuple(Receiver(name, position) for name, position in receivers.items()),
    )


def lossy(eta: float) -> Damping:
    """A loss factor, k^2 = (w/c)^2 (1 - i eta)."""
    return LossFactor(eta)


def monopole(position: tuple[float, float, float], strength: complex = 1e-3) -> Monopole:
    """A point source of volume velocity `strength` [m3/s]."""
    return Monopole("source", position, strength)
