"""A small solved box for the tests of pictures and exports: six named walls, a sheet inside, two load cases, two ears."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np

import meshes
from murmesh.solver.case.boundary import Rigid, Sheet, Vibrating
from murmesh.solver.case.load import Coherent, Incoherent, SurfaceVelocity
from murmesh.solver.case.medium import Air, LossFactor
from murmesh.solver.case.model import Case, LoadCase, Measured, Mesh, Receiver, Region, Surface, Sweep
from murmesh.solver.case.motion import Uniform
from murmesh.solver.result import Result
from murmesh.solver.sweep import solve

WALLS = ("x0", "x1", "y0", "y1", "z0", "z1")
LOADED = {"x0": 1e-3, "x1": 0.4e-3j, "z0": -0.8e-3 + 0.3e-3j}
KEPT = (120.0, 220.0)


@cache
def result(sheet: bool = True, order: int = 3) -> Result:
    """The box, solved: load case "run" is a coherent density, "idle" are incoherent tones."""
    return solve(case(sheet, order))


@cache
def curved_result() -> Result:
    """A ball of curved elements, its whole surface moving."""
    ball = meshes.ball(1)
    surfaces = (Surface("shell", Vibrating()),)
    mesh = mesh_of(ball, {"shell": ball.surfaces["sphere"]})
    load = LoadCase("run", (SurfaceVelocity("shell", Uniform(1e-3 + 0j)),), "tones")
    return solve(_case(mesh, surfaces, (load,), (Receiver("middle", (0.05, 0.1, 0.02)),), 4))


def case(sheet: bool = True, order: int = 3) -> Case:
    """The box, not yet solved."""
    box = meshes.box(2, 2, 2, (1.0, 0.8, 0.6))
    parts = {name: box.surfaces[name] for name in WALLS}
    surfaces = [Surface(name, Vibrating() if name in LOADED else Rigid()) for name in WALLS]
    if sheet:
        parts["shelf"] = meshes.faces_where(box, lambda x: (x[..., 0] == 0.5) & (x[..., 1] <= 0.4))
        surfaces.append(Surface("shelf", Sheet(Rigid(), Rigid(), front_direction=(1.0, 0.0, 0.0))))
    loads = tuple(SurfaceVelocity(name, Uniform(complex(value))) for name, value in LOADED.items())
    cases = (
        LoadCase("run", loads, "density", 2.0, Coherent()),
        LoadCase("idle", loads, "tones", combination=Incoherent()),
    )
    measured = Measured(np.array([60.0, 150.0, 240.0]), np.array([70.0, 90.0, 80.0]))
    receivers = (Receiver("left_ear", (0.3, 0.5, 0.3), 0.04, measured), Receiver("right_ear", (0.7, 0.5, 0.3)))
    return _case(mesh_of(box, parts), tuple(surfaces), cases, receivers, order)


def mesh_of(mesh: meshes.TestMesh, parts: dict[str, np.ndarray]) -> Mesh:
    """A case's mesh whose surfaces are `parts`, in their order."""
    triangles = np.concatenate(list(parts.values()))
    index = np.repeat(np.arange(len(parts)), [len(part) for part in parts.values()])
    return Mesh(mesh.nodes, mesh.tets, np.zeros(len(mesh.tets), dtype=np.int64), triangles, index)


def _case(
    mesh: Mesh,
    surfaces: tuple[Surface, ...],
    load_cases: tuple[LoadCase, ...],
    receivers: tuple[Receiver, ...],
    order: int,
) -> Case:
    sweep = Sweep.grid(60.0, 240.0, 20.0, order=order, field_frequencies=np.array(KEPT))
    region = Region("air", Air(), LossFactor(0.05))
    return Case(mesh, (region,), surfaces, sweep, load_cases, receivers, title="Test box")


def uniform_field(result: Result, pressure: complex) -> Result:
    """The same result with one pressure everywhere in the first load case: vertex unknowns alone carry a constant."""
    held = result.load_cases[0]
    fields = np.zeros_like(held.fields)
    fields[:, : result.space.topology.n_vertices] = pressure
    return replace(result, load_cases=(replace(held, fields=fields), *result.load_cases[1:]))
