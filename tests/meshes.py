"""Small tetrahedral meshes made with numpy alone, so that the solver's tests need no mesher.

Every function returns a frozen `TestMesh`: nodes (n, 3), tets (t, 4 or 10), and named outer surfaces as triangles
(m, 3 or 6).  Node order is that of VTK: mid-edge nodes 01, 12, 20 of a triangle, 01, 12, 02, 03, 13, 23 of a
tetrahedron.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

TET_EDGES = np.array([[0, 1], [1, 2], [0, 2], [0, 3], [1, 3], [2, 3]])
TRIANGLE_EDGES = np.array([[0, 1], [1, 2], [2, 0]])
TET_FACES = np.array([[1, 2, 3], [0, 3, 2], [0, 1, 3], [0, 2, 1]])  # face i opposite vertex i, normal outwards


@dataclass(frozen=True)
class TestMesh:
    """A mesh for tests: nodes (n, 3), tets (t, 4|10), surfaces by name (m, 3|6)."""

    __test__ = False  # not a test class

    nodes: Floats
    tets: Ints
    surfaces: Mapping[str, Ints] = field(default_factory=dict)

    @property
    def boundary(self) -> Ints:
        """All outer triangles (m, 3), their normals out of the mesh."""
        return boundary_triangles(self.tets)

    @property
    def volumes(self) -> Floats:
        """Volumes (t,) of the straight tetrahedra through the corners."""
        x = self.nodes[self.tets[:, :4]]
        return np.asarray(np.linalg.det(x[:, 1:] - x[:, :1]) / 6.0)

    @property
    def centroids(self) -> Floats:
        """Mean of the four corners (t, 3)."""
        return np.asarray(self.nodes[self.tets[:, :4]].mean(axis=1))


def box(
    nx: int, ny: int, nz: int, lengths: Sequence[float] = (1.0, 1.0, 1.0), origin: Sequence[float] = (0.0, 0.0, 0.0)
) -> TestMesh:
    """A box of nx x ny x nz cells of six tetrahedra each; surfaces x0, x1, y0, y1, z0, z1."""
    counts = (nx, ny, nz)
    return grid(*(o + np.linspace(0.0, w, n + 1) for n, w, o in zip(counts, lengths, origin, strict=True)))


def grid(xs: npt.ArrayLike, ys: npt.ArrayLike, zs: npt.ArrayLike) -> TestMesh:
    """A box with the given planes of nodes; surfaces x0, x1, y0, y1, z0, z1."""
    axes = [np.asarray(a, dtype=np.float64) for a in (xs, ys, zs)]
    nodes = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 3)
    shape = tuple(len(a) for a in axes)
    number = np.arange(len(nodes)).reshape(shape)
    tets = _positive(nodes, np.concatenate([_kuhn(number, order) for order in itertools.permutations(range(3))]))
    bare = TestMesh(nodes, tets)
    surfaces = {}
    for axis, side in itertools.product(range(3), (0, 1)):
        plane = axes[axis][-1 if side else 0]
        surfaces[f"{'xyz'[axis]}{side}"] = _on_boundary(bare, lambda x, a=axis, v=plane: x[..., a] == v)
    return replace(bare, surfaces=surfaces)


def _kuhn(number: Ints, order: Sequence[int]) -> Ints:
    """One tetrahedron per cell: the walk from corner 000 to corner 111 along the axes in the given order."""
    step = np.zeros(3, dtype=int)
    corners = [_corner(number, step)]
    for axis in order:
        step[axis] = 1
        corners.append(_corner(number, step))
    return np.stack(corners, axis=-1)


def _corner(number: Ints, step: Ints) -> Ints:
    where = tuple(slice(s, n - 1 + s) for s, n in zip(step, number.shape, strict=True))
    return np.asarray(number[where].ravel())


def _positive(nodes: Floats, tets: Ints) -> Ints:
    """The same tetrahedra, two corners swapped where the volume was negative."""
    x = nodes[tets]
    flip = np.linalg.det(x[:, 1:] - x[:, :1]) < 0
    out = tets.copy()
    out[flip, 2], out[flip, 3] = tets[flip, 3], tets[flip, 2]
    return out


def prism(n: int, layers: int, side: float = 1.0, height: float = 0.6) -> TestMesh:
    """An equilateral prism, n^2 triangles times layers; surfaces bottom, top, side."""
    ij = np.array([(i, j) for i in range(n + 1) for j in range(n + 1 - i)])
    number = {(i, j): k for k, (i, j) in enumerate(map(tuple, ij.tolist()))}
    points = side / n * np.stack([ij[:, 0] + 0.5 * ij[:, 1], np.sqrt(0.75) * ij[:, 1]], axis=1)
    up = [[number[i, j], number[i + 1, j], number[i, j + 1]] for i in range(n) for j in range(n - i)]
    down = [[number[i + 1, j], number[i + 1, j + 1], number[i, j + 1]] for i in range(n) for j in range(n - 1 - i)]
    return extrude(points, np.array(up + down), np.linspace(0.0, height, layers + 1))


def extrude(points: Floats, triangles: Ints, zs: npt.ArrayLike) -> TestMesh:
    """Pull a plane mesh (n, 2), (m, 3) through the heights zs; surfaces bottom, top, side."""
    heights = np.asarray(zs, dtype=np.float64)
    n, layers = len(points), len(heights) - 1
    nodes = np.concatenate([np.column_stack([points, np.full(n, z)]) for z in heights])
    low = np.sort(triangles, axis=1)  # ascending corners make the diagonals of neighbouring prisms agree
    one = np.concatenate(
        [
            np.column_stack([low, low[:, 2] + n]),
            np.column_stack([low[:, :2], low[:, 1:] + n]),
            np.column_stack([low[:, :1], low + n]),
        ]
    )
    tets = _positive(nodes, np.concatenate([one + n * k for k in range(layers)]))
    bare = TestMesh(nodes, tets)
    bottom = _on_boundary(bare, lambda x: x[..., 2] == heights[0])
    top = _on_boundary(bare, lambda x: x[..., 2] == heights[-1])
    normal = _normals(nodes, bare.boundary)
    return replace(bare, surfaces={"bottom": bottom, "top": top, "side": bare.boundary[abs(normal[:, 2]) < 0.5]})


def cylinder(n: int, layers: int, radius: float = 0.35, height: float = 0.9, order: int = 2) -> TestMesh:
    """A circular cylinder of n rings; order 2 puts the mid-edge nodes of the side on the circle."""
    rings = [np.zeros((1, 2))]
    for k in range(1, n + 1):
        angle = 2.0 * np.pi * np.arange(6 * k) / (6 * k)
        rings.append(radius * k / n * np.column_stack([np.cos(angle), np.sin(angle)]))
    mesh = extrude(np.concatenate(rings), _ring_triangles(n), np.linspace(0.0, height, layers + 1))
    if order == 1:
        return mesh

    def onto_circle(x: Floats) -> Floats:
        scale = radius / np.hypot(x[:, 0], x[:, 1])
        return np.column_stack([x[:, 0] * scale, x[:, 1] * scale, x[:, 2]])

    return quadratic(mesh, {"side": onto_circle})


def _ring_triangles(n: int) -> Ints:
    """Triangles of the hexagonal disc whose ring k has 6 k nodes."""
    triangles = []
    start = [0] + [1 + 3 * k * (k - 1) for k in range(1, n + 2)]
    for k in range(1, n + 1):
        outer = [start[k] + i % (6 * k) for i in range(6 * k + 1)]
        inner = [start[k - 1] + i % max(6 * (k - 1), 1) for i in range(6 * k + 1)]
        for sector in range(6):
            for i in range(k):
                o, q = sector * k + i, sector * (k - 1) + i
                triangles.append([inner[q], outer[o], outer[o + 1]])
                if i < k - 1:
                    triangles.append([inner[q], outer[o + 1], inner[q + 1]])
    return np.array(triangles)


def ball(n: int, radius: float = 0.5, order: int = 2) -> TestMesh:
    """A ball of 20 n^3 tetrahedra (an icosahedron, blown up radially); surface "sphere"."""
    corners, faces = _icosahedron()
    tables = [_split_tet(np.vstack([np.zeros(3), corners[f]]), n) for f in faces]
    points = np.concatenate([p for p, _ in tables])
    levels = np.concatenate([np.rint(n * (1.0 - b[:, 0])) / n for _, b in tables])
    length = np.linalg.norm(points, axis=1)
    points = points * (radius * levels / np.where(length > 0, length, 1.0))[:, None]
    _, first, inverse = np.unique(np.round(points / radius, 9) + 0.0, axis=0, return_index=True, return_inverse=True)
    size = len(tables[0][0])
    local = _split_connectivity(n)
    tets = np.concatenate([inverse.reshape(-1)[k * size + local] for k in range(len(faces))])
    nodes = points[first]
    bare = TestMesh(nodes, _positive(nodes, tets))
    mesh = replace(bare, surfaces={"sphere": bare.boundary})
    if order == 1:
        return mesh
    return quadratic(mesh, {"sphere": lambda x: radius * x / np.linalg.norm(x, axis=1, keepdims=True)})


def shell(n: int, radii: Sequence[float], stretch: Sequence[float] = (1.0, 1.0, 1.0), half: bool = False) -> TestMesh:
    """Curved layers between spheres (times `stretch` along the axes), 8 n^2 triangles each; surfaces inner, outer.

    `half` keeps z > 0; the rim faces are then the surface "rim".
    """
    return _layered(*_octasphere(n), radii, stretch, half)


def ringed_shell(n: int, radii: Sequence[float]) -> TestMesh:
    """A shell whose edges run along n latitudes per quarter, 90/n degrees apart, so that a cap can end on them."""
    mesh = _layered(*_octasphere(n, rings=True), radii, (1.0, 1.0, 1.0), half=False)
    nodes, ends, middle = mesh.nodes.copy(), mesh.tets[:, TET_EDGES].reshape(-1, 2), mesh.tets[:, 4:].ravel()
    height = nodes[ends][..., 2] / np.linalg.norm(nodes[ends], axis=2)
    ring = np.abs(height[:, 0] - height[:, 1]) < 1e-9
    at, z = middle[ring], height[ring, 0]
    radius = np.linalg.norm(nodes[at], axis=1)
    flat = np.hypot(*nodes[at, :2].T)
    nodes[at, :2] *= (radius * np.sqrt(1.0 - z**2) / np.maximum(flat, 1e-300))[:, None]
    nodes[at, 2] = radius * z
    return replace(mesh, nodes=nodes)


def _layered(points: Floats, triangles: Ints, radii: Sequence[float], stretch: Sequence[float], half: bool) -> TestMesh:
    if half:
        triangles = triangles[np.all(points[triangles][..., 2] > -1e-12, axis=1)]
        used, flat = np.unique(triangles, return_inverse=True)
        points, triangles = points[used], flat.reshape(-1, 3)
    count, low = len(points), np.sort(triangles, axis=1)
    one = np.concatenate([np.column_stack([low[:, : k + 1], low[:, k:] + count]) for k in range(3)])
    nodes = np.concatenate([r * points for r in radii])
    tets = _positive(nodes, np.concatenate([one + count * k for k in range(len(radii) - 1)]))
    bare = TestMesh(nodes, tets)
    level = lambda value: lambda x: np.abs(np.linalg.norm(x, axis=-1) - value) < 1e-9 * value  # noqa: E731
    surfaces = {"inner": _on_boundary(bare, level(radii[0])), "outer": _on_boundary(bare, level(radii[-1]))}
    if half:
        surfaces["rim"] = _on_boundary(bare, lambda x: np.abs(x[..., 2]) < 1e-12)
    curved = _rounded(quadratic(replace(bare, surfaces=surfaces)), bare)
    return replace(curved, nodes=curved.nodes * np.asarray(stretch))


def dome(n: int, radii: Sequence[float]) -> TestMesh:
    """Half a ball z > 0 whose spheres (the first of radius 0) have the given radii, n = len(radii) - 1 levels; surfaces
    outer and disc_0 .. disc_(n-1), the rings of the plane z = 0 from the middle outwards."""
    signs = itertools.product((1.0, -1.0), repeat=2)
    octahedron = [np.array([(0, 0, 0), (sx, 0, 0), (0, sy, 0), (0, 0, 1.0)]) for sx, sy in signs]
    tables = [_split_tet(corners, n) for corners in octahedron]
    bary = np.concatenate([b for _, b in tables])
    points = np.concatenate([_on_sphere(b[:, 1:], c[1:]) for (_, b), c in zip(tables, octahedron, strict=True)])
    points = points * np.asarray(radii)[np.rint(n * (1.0 - bary[:, 0])).astype(int)][:, None]
    _, first, inverse = np.unique(np.round(points / radii[-1], 9) + 0.0, axis=0, return_index=True, return_inverse=True)
    size, local = len(tables[0][0]), _split_connectivity(n)
    nodes = points[first]
    tets = np.concatenate([inverse.reshape(-1)[k * size + local] for k in range(len(octahedron))])
    bare = TestMesh(nodes, _positive(nodes, tets))
    surfaces = {"outer": _on_boundary(bare, lambda x: np.abs(np.linalg.norm(x, axis=-1) - radii[-1]) < 1e-9)}
    floor = _on_boundary(bare, lambda x: np.abs(x[..., 2]) < 1e-12)
    reach = np.linalg.norm(nodes[floor], axis=2).max(axis=1)
    for k in range(n):
        surfaces[f"disc_{k}"] = floor[np.abs(reach - radii[k + 1]) < 1e-9]
    return _rounded(quadratic(replace(bare, surfaces=surfaces)), bare)


def flanged_pipe(radii: Sequence[float], layers: Floats) -> TestMesh:
    """A round pipe of radius 1 from below (planes z = `layers`, the last one 0) into a dome of air over a floor: spheres of
    the given radii (1 among them), as in `dome`; surfaces outer and bottom."""
    top = dome(len(radii) - 1, radii)
    corners = top.tets[:, :4]
    nodes = top.nodes[: corners.max() + 1]
    disc = np.concatenate([top.surfaces[f"disc_{i}"] for i in range(list(radii).index(1.0))])[:, :3]
    used, flat = np.unique(disc, return_inverse=True)
    pipe = extrude(nodes[used][:, :2], flat.reshape(-1, 3), layers)
    both = np.concatenate([nodes, pipe.nodes])
    _, first, same = np.unique(np.round(both, 9) + 0.0, axis=0, return_index=True, return_inverse=True)
    bare = TestMesh(both[first], same.reshape(-1)[np.concatenate([corners, pipe.tets + len(nodes)])])
    on_dome = lambda x: (np.abs(np.linalg.norm(x, axis=-1) - radii[-1]) < 1e-9) & (x[..., 2] > -1e-9)  # noqa: E731
    bottom = _on_boundary(bare, lambda x: np.abs(x[..., 2] - layers[0]) < 1e-9)
    mesh = quadratic(replace(bare, surfaces={"outer": _on_boundary(bare, on_dome), "bottom": bottom}))
    moved, middle = mesh.nodes.copy(), mesh.tets[:, 4:].ravel()
    ends = bare.nodes[bare.tets[:, TET_EDGES].reshape(-1, 2)]
    above = np.all(ends[..., 2] > -1e-9, axis=1)
    for at, axes in ((above, 3), (~above, 2)):  # spheres above, cylinders below
        wanted = np.linalg.norm(ends[at][..., :axes], axis=2).mean(axis=1)
        found = np.linalg.norm(mesh.nodes[middle[at], :axes], axis=1)
        moved[middle[at], :axes] = mesh.nodes[middle[at], :axes] * (wanted / np.maximum(found, 1e-300))[:, None]
    return replace(mesh, nodes=moved)


def _on_sphere(bary: Floats, corners: Floats) -> Floats:
    """Unit vectors of barycentric coordinates of a corner of the octahedron, equal angles along its edges."""
    x = np.sin(0.5 * np.pi * bary / np.maximum(bary.sum(axis=1, keepdims=True), 1e-300)) @ corners
    return np.asarray(x / np.maximum(np.linalg.norm(x, axis=1, keepdims=True), 1e-300))


def _rounded(mesh: TestMesh, bare: TestMesh) -> TestMesh:
    """Every mid-edge node at the mean radius of its two ends."""
    nodes = mesh.nodes.copy()
    ends, middle = bare.tets[:, TET_EDGES].reshape(-1, 2), mesh.tets[:, 4:].ravel()
    radius = np.linalg.norm(bare.nodes[ends], axis=2).mean(axis=1)
    nodes[middle] *= (radius / np.maximum(np.linalg.norm(nodes[middle], axis=1), 1e-300))[:, None]
    return replace(mesh, nodes=nodes)


def _octasphere(n: int, *, rings: bool = False) -> tuple[Floats, Ints]:
    """8 n^2 triangles on the unit sphere, no edge across the planes x, y, z = 0; equal angles along the edges, or points on
    latitudes 90/n degrees apart."""
    ij = np.array([(i, j) for i in range(n + 1) for j in range(n + 1 - i)])
    number = {(i, j): m for m, (i, j) in enumerate(map(tuple, ij.tolist()))}
    up = [[number[i, j], number[i + 1, j], number[i, j + 1]] for i in range(n) for j in range(n - i)]
    down = [[number[i + 1, j], number[i + 1, j + 1], number[i, j + 1]] for i in range(n) for j in range(n - 1 - i)]
    bary = np.column_stack([ij, n - ij.sum(axis=1)]) / n
    x = np.sin(0.5 * np.pi * bary)
    x /= np.linalg.norm(x, axis=1, keepdims=True)
    if rings:
        s = ij.sum(axis=1)
        polar, azimuth = 0.5 * np.pi * s / n, 0.5 * np.pi * ij[:, 1] / np.maximum(s, 1)
        x = np.stack([np.sin(polar) * np.cos(azimuth), np.sin(polar) * np.sin(azimuth), np.cos(polar)], axis=1)
        x[np.abs(x) < 1e-15] = 0.0
    parts = [(x * np.array(signs), np.array(up + down)) for signs in itertools.product((1.0, -1.0), repeat=3)]
    points = np.concatenate([p for p, _ in parts])
    triangles = np.concatenate([t + len(x) * k for k, (_, t) in enumerate(parts)])
    _, first, inverse = np.unique(np.round(points, 9) + 0.0, axis=0, return_index=True, return_inverse=True)
    return points[first], inverse.reshape(-1)[triangles]


def _icosahedron() -> tuple[Floats, Ints]:
    g = (1.0 + np.sqrt(5.0)) / 2.0
    corners = np.array([(0.0, s, t * g) for s in (-1.0, 1.0) for t in (-1.0, 1.0)])
    corners = np.concatenate([corners, np.roll(corners, 1, axis=1), np.roll(corners, 2, axis=1)])
    corners /= np.linalg.norm(corners, axis=1, keepdims=True)
    triples = np.array(list(itertools.combinations(range(12), 3)))
    edge = np.linalg.norm(corners[triples] - corners[np.roll(triples, 1, axis=1)], axis=2)
    return corners, triples[np.all(edge < 1.1, axis=1)]


def _lattice(n: int) -> Ints:
    """Points n >= i >= j >= k >= 0 of the edgewise subdivision."""
    return np.array([(i, j, k) for i in range(n + 1) for j in range(i + 1) for k in range(j + 1)])


def _split_tet(corners: Floats, n: int) -> tuple[Floats, Floats]:
    """Points (m, 3) and barycentric coordinates (m, 4) of the subdivision of one tetrahedron."""
    i, j, k = _lattice(n).T
    bary = np.column_stack([n - i, i - j, j - k, k]) / n
    return bary @ corners, bary


def _split_connectivity(n: int) -> Ints:
    points = _lattice(n)
    number = {tuple(p): m for m, p in enumerate(points.tolist())}
    tets = []
    for start, order in itertools.product(points, itertools.permutations(range(3))):
        walk = [start.copy()]
        for axis in order:
            walk.append(walk[-1] + np.eye(3, dtype=int)[axis])
        keys = [tuple(p.tolist()) for p in walk]
        if all(key in number for key in keys):
            tets.append([number[key] for key in keys])
    return np.array(tets)


def quadratic(mesh: TestMesh, project: Mapping[str, Callable[[Floats], Floats]] | None = None) -> TestMesh:
    """Add mid-edge nodes; those of the named surfaces are moved by `project` (k, 3) -> (k, 3)."""
    ends = np.sort(mesh.tets[:, TET_EDGES], axis=2).reshape(-1, 2)
    edges, inverse = np.unique(ends, axis=0, return_inverse=True)
    middles = mesh.nodes[edges].mean(axis=1)
    count = len(mesh.nodes)
    number = {(int(a), int(b)): k for k, (a, b) in enumerate(edges)}
    surfaces = {}
    for name, triangles in mesh.surfaces.items():
        pairs = np.sort(triangles[:, TRIANGLE_EDGES], axis=2).reshape(-1, 2)
        ids = np.array([number[int(a), int(b)] for a, b in pairs], dtype=np.int64)
        surfaces[name] = np.hstack([triangles, count + ids.reshape(-1, 3)])
        if project and name in project:
            unique = np.unique(ids)
            middles[unique] = project[name](middles[unique])
    tets = np.hstack([mesh.tets, count + inverse.reshape(-1, 6)])
    return TestMesh(np.vstack([mesh.nodes, middles]), tets, surfaces)


def jiggled(mesh: TestMesh, amount: float = 0.15, seed: int = 1) -> TestMesh:
    """Move the inner nodes of an order-1 mesh by at most `amount` of the shortest edge: an unstructured geometry."""
    ends = mesh.tets[:, TET_EDGES]
    shortest = np.linalg.norm(mesh.nodes[ends[..., 0]] - mesh.nodes[ends[..., 1]], axis=-1).min()
    shift = np.random.default_rng(seed).uniform(-amount, amount, mesh.nodes.shape) * shortest
    shift[np.unique(mesh.boundary)] = 0.0
    return replace(mesh, nodes=mesh.nodes + shift)


def shuffled(mesh: TestMesh, seed: int = 1) -> TestMesh:
    """Renumber nodes, tetrahedra and corners of an order-1 mesh at random: every orientation occurs."""
    rng = np.random.default_rng(seed)
    order = rng.permutation(len(mesh.nodes))
    number = np.argsort(order)
    tets = rng.permuted(number[mesh.tets], axis=1)[rng.permutation(len(mesh.tets))]
    surfaces = {name: number[triangles] for name, triangles in mesh.surfaces.items()}
    return TestMesh(mesh.nodes[order], tets, surfaces)


def boundary_triangles(tets: Ints) -> Ints:
    """The faces (m, 3) that belong to one tetrahedron only, normal outwards when the volume is positive."""
    faces = tets[:, TET_FACES].reshape(-1, 3)
    _, first, count = np.unique(np.sort(faces, axis=1), axis=0, return_index=True, return_counts=True)
    return np.asarray(faces[np.sort(first[count == 1])])


def faces_where(mesh: TestMesh, inside: Callable[[Floats], npt.NDArray[np.bool_]]) -> Ints:
    """All faces (m, 3) of the mesh, inner ones too, whose three corners satisfy `inside` ((..., 3) -> bool)."""
    faces = np.unique(np.sort(mesh.tets[:, TET_FACES].reshape(-1, 3), axis=1), axis=0)
    return np.asarray(faces[np.all(inside(mesh.nodes[faces]), axis=1)])


def _on_boundary(mesh: TestMesh, inside: Callable[[Floats], npt.NDArray[np.bool_]]) -> Ints:
    triangles = mesh.boundary
    return np.asarray(triangles[np.all(inside(mesh.nodes[triangles]), axis=1)])


def _normals(nodes: Floats, triangles: Ints) -> Floats:
    x = nodes[triangles]
    normal = np.cross(x[:, 1] - x[:, 0], x[:, 2] - x[:, 0])
    return np.asarray(normal / np.linalg.norm(normal, axis=1, keepdims=True))
