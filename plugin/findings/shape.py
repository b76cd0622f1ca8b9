"""Findings about the mesh itself: foreign cells, size, flat, inverted and overlapping elements, parts apart."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import numpy.typing as npt

from murmesh.plugin.findings.finding import Finding, error, note, warning
from murmesh.plugin.findings.scene import Scene
from murmesh.plugin.mesh_source import LARGEST, SMALLEST, TaggedMesh, cell_keys
from murmesh.plugin.skin import Skin
from murmesh.solver.case.boundary import Boundary
from murmesh.solver.errors import CaseError, MeshError

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
FLAT, POOR = 0.01, 0.1
"""Mean-ratio quality below which an element is flat or poor (common practice, no source)."""
ABSURD = 1000.0  # metres
_EDGES = np.array([[0, 1], [1, 2], [0, 2], [0, 3], [1, 3], [2, 3]])
_WHERE_CURVED = np.vstack([np.eye(4), (np.eye(4)[_EDGES[:, 0]] + np.eye(4)[_EDGES[:, 1]]) / 2, np.full((1, 4), 0.25)])


def foreign_cells(mesh: TaggedMesh) -> Iterator[Finding]:
    """Cells that are no tetrahedra of order 1 or 2."""
    if mesh.other_cells:
        text = ", ".join(f"{count} {name}" for name, count in sorted(mesh.other_cells.items()))
        cure = (
            "mesh with tetrahedra only (in gmsh: no recombination, no extruded layers, no transfinite hexahedra), order 1 or 2"
        )
        yield error("non_tetrahedral_cells", mesh.source, f"the mesh holds cells that are not used: {text}", cure)


def size(nodes: Floats) -> Iterator[Finding]:
    """Millimetres taken for metres, and the reverse."""
    extent = float(np.ptp(nodes, axis=0).max()) if len(nodes) else 0.0
    if SMALLEST <= extent <= LARGEST or not len(nodes):
        return
    text = f"the model is {extent:.4g} m long; expected {SMALLEST:g} .. {LARGEST:g} m"
    cure = 'state the unit of the mesh, e.g. unit = "mm" under [mesh]' + (
        "; if it is right, ignore this" if extent <= ABSURD else ""
    )
    yield (error if extent > ABSURD else warning)("implausible_size", "mesh", text, cure)


def quality(nodes: Floats, tets: Ints) -> Floats:
    """12 (3 V)^(2/3) / sum l^2, (t,): 1 for a regular tetrahedron, 0 for a flat one.

    The mean ratio of Liu & Joe, BIT 34 (1994) 268.
    """
    x = nodes[tets[:, :4]]
    volume = np.abs(np.linalg.det(x[:, 1:] - x[:, :1])) / 6
    squares = np.sum((x[:, _EDGES[:, 0]] - x[:, _EDGES[:, 1]]) ** 2, axis=(1, 2))
    return np.asarray(12 * (3 * volume) ** (2 / 3) / np.maximum(squares, 1e-300))


def inverted(nodes: Floats, tets: Ints) -> Ints:
    """Curved elements whose Jacobian changes sign or vanishes at a corner, mid-edge or centre, as row numbers."""
    if tets.shape[1] == 4:
        return np.empty(0, dtype=np.int64)
    bad = []
    for start in range(0, len(tets), 20000):
        x = nodes[tets[start : start + 20000]]
        det = np.stack([np.linalg.det(_gradients(b) @ x) for b in _WHERE_CURVED], axis=1)
        straight = np.linalg.det(x[:, 1:4] - x[:, :1])
        bad.append(start + np.flatnonzero(np.any(det * np.sign(straight)[:, None] <= 0, axis=1)))
    return np.concatenate(bad) if bad else np.empty(0, dtype=np.int64)


def _gradients(b: Floats) -> Floats:
    """dN/d(b1, b2, b3) (3, 10) of the quadratic tetrahedron at barycentric b."""
    slope = np.array([[-1.0, 1, 0, 0], [-1, 0, 1, 0], [-1, 0, 0, 1]])
    corners = (4 * b - 1) * slope
    low, high = _EDGES.T
    return np.hstack([corners, 4 * (b[low] * slope[:, high] + b[high] * slope[:, low])])


def elements(nodes: Floats, tets: Ints) -> Iterator[Finding]:
    """Flat, poor and inverted elements."""
    if not len(tets):
        return
    q = quality(nodes, tets)
    worst = int(np.argmin(q))
    at = nodes[tets[worst, :4]].mean(axis=0)
    where = f"the worst, {q[worst]:.2g}, at ({at[0]:.3g}, {at[1]:.3g}, {at[2]:.3g}) m"
    flat, poor = int(np.sum(q < FLAT)), int(np.sum(q < POOR))
    if flat:
        text = f"{flat} of {len(q)} tetrahedra are flat (quality below {FLAT:g}; {where})"
        cure = "remesh: heal slivers in the geometry, then optimise the mesh (in gmsh: Mesh.OptimizeNetgen = 1)"
        yield error("flat_elements", "mesh", text, cure)
    elif poor:
        text = f"{poor} of {len(q)} tetrahedra are poor (quality below {POOR:g}; {where})"
        yield warning("poor_elements", "mesh", text, "optimise the mesh (in gmsh: Mesh.OptimizeNetgen = 1)")
    bad = inverted(nodes, tets)
    if len(bad):
        at = nodes[tets[bad[0], :4]].mean(axis=0)
        text = f"{len(bad)} curved tetrahedra are inverted, one at ({at[0]:.3g}, {at[1]:.3g}, {at[2]:.3g}) m"
        cure = "mesh finer along curved surfaces, optimise (in gmsh: Mesh.HighOrderOptimize = 2), or use order 1"
        yield error("inverted_elements", "mesh", text, cure)


def overlaps(skin: Skin) -> Iterator[Finding]:
    """Faces of more than two tetrahedra."""
    if len(skin.overfull):
        at = skin.centroids(skin.corners(skin.overfull[:1]))[0]
        place = f"({at[0]:.3g}, {at[1]:.3g}, {at[2]:.3g}) m"
        text = f"{len(skin.overfull)} faces belong to more than two tetrahedra, one at {place}"
        yield error("overlapping_volumes", "mesh", text, "volumes overlap: fragment the geometry, then mesh it once")


def separate_parts(scene: Scene) -> Iterator[Finding]:
    """Volumes of fluid that do not touch the rest and hold no load, no receiver, or neither."""
    parts = scene.parts
    count = int(parts.max()) + 1
    if count == 1:
        return
    loaded, heard = _loaded(scene), _heard(scene)
    x = scene.case.mesh.nodes[scene.case.mesh.tets[:, :4]]
    volumes = np.abs(np.linalg.det(x[:, 1:] - x[:, :1])) / 6
    cure = (
        "if it should be joined to the rest, fragment the volumes so that they share their faces; otherwise give it a "
        "load and a receiver, or leave it out"
    )
    for part in range(count):
        if part in loaded and part in heard:
            continue
        inside = parts == part
        middle = np.average(x[inside].mean(axis=1), axis=0, weights=volumes[inside])
        place = f"({middle[0]:.3g}, {middle[1]:.3g}, {middle[2]:.3g}) m"
        start = f"a volume of {volumes[inside].sum():.3g} m3 about {place} touches no other fluid and"
        if part in heard:
            yield warning("silent_receivers", place, f"{start} has receivers, but no load: they hear nothing", cure)
        elif part not in loaded:
            yield warning("unused_fluid", place, f"{start} has no load and no receiver", cure)
        else:
            yield note("unheard_fluid", place, f"{start} has a load, but no receiver", cure)


def _loaded(scene: Scene) -> set[int]:
    names = {load.acts_on for _, load in scene.loads()}
    rows = [scene.rows(i) for i, surface in enumerate(scene.case.surfaces) if surface.name in names]
    tets = scene.owners[np.concatenate([*rows, np.empty(0, np.int64)])].ravel()
    held = {int(part) for part in np.unique(scene.parts[tets[tets >= 0]])}
    return held | _parts_at(scene, [source.position for source in scene.sources])


def _heard(scene: Scene) -> set[int]:
    return _parts_at(scene, [receiver.position for receiver in scene.case.receivers])


def _parts_at(scene: Scene, positions: list[tuple[float, float, float]]) -> set[int]:
    if not positions:
        return set()
    tets = scene.geometry.locate(np.asarray(positions))[0]
    return {int(part) for part in scene.parts[tets[tets >= 0]]}


def placement(scene: Scene) -> Iterator[Finding]:
    """Surfaces whose triangles lie where their kind cannot be: inside, outside, or on no tetrahedron."""
    for index, surface in enumerate(scene.case.surfaces):
        owners = scene.owners[scene.rows(index)]
        loose, inner = int(np.sum(owners[:, 0] < 0)), int(np.sum(owners[:, 1] >= 0))
        outer = len(owners) - loose - inner
        if not len(owners):
            cure = "give it triangles, or take it out of the case"
            yield warning("surface_without_triangles", surface.name, "the surface has no triangles", cure)
        if loose:
            cure = "give the surface the same mesh as the volume"
            text = f"{loose} of its {len(owners)} triangles are a face of no tetrahedron"
            yield error("triangle_on_no_tetrahedron", surface.name, text, cure)
        yield from _side_finding(surface.name, surface.boundary, inner, outer)


def listing(scene: Scene) -> Iterator[Finding]:
    """Triangles listed more than once, and outer faces that no surface holds."""
    named = scene.case.mesh.triangle_surface >= 0
    keys = cell_keys(scene.case.mesh.triangles[named][:, :3], len(scene.case.mesh.nodes))
    twice = len(keys) - len(np.unique(keys))
    if twice:
        text = f"{twice} triangles are listed more than once; their loads and losses would count as often"
        yield error("triangle_listed_twice", "mesh", text, "list every triangle once, with one surface")
    outside = (scene.owners[:, 0] >= 0) & (scene.owners[:, 1] < 0)
    free = len(scene.skin.outer) - len(np.unique(keys[outside[named]]))
    if free > 0:
        text = f"{free} outer triangles belong to no surface; they are hard walls without any absorption"
        yield warning("surface_without_kind", "mesh", text, "give every outer triangle a surface")


def _side_finding(name: str, boundary: Boundary, inner: int, outer: int) -> Iterator[Finding]:
    two_sided = len(boundary.sides) == 2
    if inner and not two_sided:
        text = f"{inner} of its triangles lie inside the fluid, but '{boundary.kind_name}' needs fluid on one side only"
        cure = "make it a sheet (two-sided), or take it out of the job: an interface between regions needs no kind"
        yield error("inner_surface_without_sheet", name, text, cure)
    if outer and two_sided:
        text = f"{outer} of its triangles have fluid on one side only, but a sheet lies inside the fluid"
        yield error("sheet_on_the_outside", name, text, "give those triangles a surface of their own")


def outside(scene: Scene) -> Iterator[Finding]:
    """Receivers and sources that lie outside every region."""
    from murmesh.solver.receiver_points import locate_receivers

    for receiver in scene.case.receivers:
        try:
            locate_receivers(scene.case.with_(receivers=(receiver,)), scene.geometry)
        except CaseError as problem:
            cure = "move it into the air (metres), or make its radius smaller"
            yield error("receiver_outside", receiver.name, str(problem), cure)
    for source in scene.sources:
        at = np.asarray([source.position])
        if scene.geometry.locate(at)[0][0] < 0:
            near = scene.geometry.nearest_point(at[0])
            text = (
                f"the source lies outside every region at ({at[0, 0]:.4g}, {at[0, 1]:.4g}, {at[0, 2]:.4g}) m; the "
                f"nearest point of the fluid is ({near[0]:.4g}, {near[1]:.4g}, {near[2]:.4g}) m"
            )
            yield error("source_outside", source.name, text, "move it into the air (metres)")


def radiation(scene: Scene) -> Iterator[Finding]:
    """Surfaces that radiate but are open, not star-shaped or off their ground, and receivers that are not beyond them."""
    from murmesh.solver.exterior import Exterior
    from murmesh.solver.receiver_points import locate_receivers, not_in_fluid
    from murmesh.solver.space import discretise

    names = [surface.name for surface in scene.case.surfaces if surface.boundary.radiates]
    if not names:
        return
    try:
        space = discretise(scene.case, order=1)
        outside = [Exterior(outer.envelope, space.size) for outer in space.envelopes]
    except MeshError as problem:
        cure = "close the surface, or give another centre or ground plane: all of it must be seen from its centre"
        yield error("radiating_surface", names[0], str(problem), cure)
        return
    samples = locate_receivers(scene.case, space.geometry)
    for sample in np.flatnonzero(samples.tet < 0):
        receiver, point = scene.case.receivers[samples.receiver[sample]], samples.points[sample]
        if not any(each.beyond(point[None])[0] for each in outside):
            cure = "move it into the air or beyond the surface that radiates, above its ground"
            yield error("receiver_outside", receiver.name, str(not_in_fluid(receiver, point, space.geometry)), cure)
