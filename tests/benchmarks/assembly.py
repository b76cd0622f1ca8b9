"""Stiffness and mass of 100k tetrahedra against NGSolve (a peer for benchmarks only): same mesh, same order, same run.

Both start from a mesh with its unknowns numbered, and build the pattern, K and M. CPU seconds, so that what else runs on the
machine matters little. NGSolve runs on one thread, and once more on all of them (total CPU seconds).
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Iterator
from typing import Any

import numpy as np

from bench import Row, benchmark, best_of, peaked
from meshes import TestMesh, box, jiggled, quadratic
from murmesh.solver.dofs import DofMap
from murmesh.solver.elements.geometry import Geometry
from murmesh.solver.topology import Topology
from murmesh.solver.volumes import volume_matrices

TARGETS = {2: 0.6, 3: 0.6, 4: 0.6, 5: 0.6, 6: 0.25}
CELLS = {2: 25, 3: 25, 4: 25, 5: 19, 6: 13}
"""Cells per side: 25^3 6 = 93 750 tetrahedra, fewer where K and M of all of them would take more than about 4 GB."""


@benchmark("assembly")
def assembly(quick: bool) -> Iterator[Row]:
    for order, cells in CELLS.items():
        yield from _compare(order, min(cells, 10) if quick else cells)
    yield from _curved(4, 8 if quick else 15)


def _compare(order: int, cells: int) -> Iterator[Row]:
    mesh = jiggled(box(cells, cells, cells))
    own = _own(mesh, order)
    _, peak = peaked(own)
    seconds = best_of(2, own, time.process_time)
    name = f"assembly p={order}, {len(mesh.tets)} tets"
    yield Row(f"{name}: CPU time", seconds, "s")
    yield Row(f"{name}: peak memory", peak, "MiB")
    peer = _peer(mesh, order)
    if peer is None:
        yield Row(f"{name}: ratio", math.nan, "", "peer not installed (pip install ngsolve)", TARGETS[order])
        return
    _, peer_peak = peaked(peer)
    single = best_of(2, peer, time.process_time)
    yield Row(
        f"{name}: ratio", seconds / single, "", f"NGSolve, 1 thread: {single:.2f} s, {peer_peak:.0f} MiB", TARGETS[order]
    )
    total = best_of(1, _with_threads(peer), time.process_time)
    yield Row(f"{name}: ratio", seconds / total, "", f"NGSolve, all threads: {total:.2f} CPU s", TARGETS[order])


def _own(mesh: TestMesh, order: int) -> Callable[[], object]:
    geometry, dofmap = Geometry(mesh.nodes, mesh.tets), DofMap.build(Topology.build(mesh.tets), order)
    return lambda: volume_matrices(geometry, dofmap)


def _peer(mesh: TestMesh, order: int) -> Callable[[], object] | None:
    """NGSolve's K and M on the very same tetrahedra; None where it is not installed."""
    try:
        import ngsolve as ng
    except ImportError:
        return None
    space = ng.H1(_peer_mesh(mesh), order=order)
    u, v = space.TnT()

    def assemble() -> object:
        stiffness, mass = ng.BilinearForm(ng.grad(u) * ng.grad(v) * ng.dx), ng.BilinearForm(u * v * ng.dx)
        return stiffness.Assemble(), mass.Assemble()

    return assemble


def _with_threads(work: Callable[[], object]) -> Callable[[], object]:
    import ngsolve as ng

    def run() -> object:
        with ng.TaskManager():
            return work()

    return run


def _peer_mesh(mesh: TestMesh) -> Any:
    import ngsolve as ng
    from netgen.meshing import Element2D, Element3D, FaceDescriptor, Mesh, MeshPoint, Pnt

    out = Mesh(dim=3)
    points = [out.Add(MeshPoint(Pnt(*x))) for x in mesh.nodes.tolist()]
    out.Add(FaceDescriptor(surfnr=1, domin=1, bc=1))
    for tet in mesh.tets[:, [0, 1, 3, 2]].tolist():  # its tetrahedra are oriented the other way
        out.Add(Element3D(1, [points[i] for i in tet]))
    for triangle in mesh.boundary.tolist():
        out.Add(Element2D(1, [points[i] for i in triangle]))
    return ng.Mesh(out)


def _curved(order: int, cells: int) -> Iterator[Row]:
    """The same mesh with none, 5 % and all of its tetrahedra curved: quadrature is paid for the curved ones only."""
    straight = quadratic(box(cells, cells, cells))
    seconds = []
    for share in (0.0, 0.05, 1.0):
        mesh = _bent(straight, share)
        found = Geometry(mesh.nodes, mesh.tets).curved.mean()
        seconds.append(best_of(2, _own(mesh, order), time.process_time))
        name = f"assembly p={order}, {len(mesh.tets)} tets, {found:.0%} curved"
        yield Row(name, seconds[-1] / seconds[0], "", f"none curved: {seconds[0]:.2f} CPU s")


def _bent(mesh: TestMesh, share: float) -> TestMesh:
    """Mid-edge nodes moved a little, until about `share` of the tetrahedra are curved."""
    nodes, middle = mesh.nodes.copy(), mesh.tets[:, 4:]
    order = np.random.default_rng(4).permutation(np.unique(middle))
    low, high = 0, len(order)
    while low < high:  # bisect over the number of moved nodes
        count = (low + high) // 2
        low, high = (count + 1, high) if np.isin(middle, order[:count]).any(axis=1).mean() < share else (low, count)
    nodes[order[:low]] += 1e-3 / round((len(mesh.tets) / 6) ** (1 / 3))
    return TestMesh(nodes, mesh.tets)
