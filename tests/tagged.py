"""Tagged meshes and jobs for the tests of the plugin, made without a mesher."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from meshes import TestMesh, box
from murmesh.plugin.job import Job
from murmesh.plugin.mesh_source import TaggedMesh, tagged_mesh
from murmesh.solver.case.boundary import Rigid, Vibrating
from murmesh.solver.case.medium import Air, LossFactor

BOX = box(3, 2, 2, (1.2, 0.8, 0.6))


def tagged(mesh: TestMesh = BOX, regions: Mapping[str, npt.NDArray[np.int64]] | None = None, **rest: Any) -> TaggedMesh:
    """A test mesh with one region `air`, or the given ones (rows of tets)."""
    rows = regions if regions is not None else {"air": np.arange(len(mesh.tets))}
    tets = [(mesh.tets, ()), *((mesh.tets[held], (name,)) for name, held in rows.items())]
    triangles = [(held, (name,)) for name, held in mesh.surfaces.items()]
    return tagged_mesh(mesh.nodes, tets, triangles, **rest)


def job(**surfaces: Any) -> Job:
    """A sound job on `BOX`: all walls rigid but z0, which vibrates; keyword arguments replace kinds by surface name."""
    made = Job(title="box").region("air", Air(), LossFactor(0.02))
    for name in ("x0", "x1", "y0", "y1", "z1"):
        made = made.surface(name, surfaces.get(name, Rigid()))
    made = made.surface("z0", Vibrating(), velocity=1e-3)
    return made.receiver("ear", (0.5, 0.3, 0.3)).with_sweep(50, 200, 50, order=4)
