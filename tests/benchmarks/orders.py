"""Order per element against the cheapest uniform order, on graded boxes with exact solutions.

A box of one fluid, or of two in series, driven on x = 0 by v = sum_mn a_mn cos(m pi y/Ly) cos(n pi z/Lz) with random complex
a_mn (propagating and mildly evanescent), rigid on its sides, with a uniform impedance on x = L. Every (m, n) is a line: two
waves per fluid, joined by p and v_x. Meshes are graded by gmsh towards random points and segments, size ratio 3 to 6.

The measure is the rms over 40 random receivers of the error of the level, and the unknowns. Receivers near nodes of the
field weigh most in such a rms. All data are invented.
"""

from __future__ import annotations

import time
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from bench import Row, benchmark
from murmesh.solver.assembly import evaluate, surface_load, surface_mass, volume_matrices
from murmesh.solver.case.boundary import Impedance, Rigid, Vibrating
from murmesh.solver.case.medium import GivenFluid, LossFactor, damped
from murmesh.solver.case.model import Case, Mesh, Region, Surface, Sweep
from murmesh.solver.case.wall import Given
from murmesh.solver.linalg import analyse, solve_refined
from murmesh.solver.orders import expected_errors
from murmesh.solver.space import Space, discretise

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
Ints = npt.NDArray[np.int64]

MOST_UNKNOWNS = 160_000
FEWEST_TETS, MOST_TETS = 600, 6000


@dataclass(frozen=True, eq=False)
class Box:
    """A case, the amplitudes a_mn (modes,) of `modes` (modes, 2), and 40 receivers (40, 3)."""

    name: str
    case: Case
    lengths: tuple[float, float, float]
    cut: float
    modes: Ints
    amplitudes: Complex
    receivers: Floats
    grading: float

    @property
    def frequency(self) -> float:
        return float(self.case.sweep.frequencies[0])

    @property
    def size(self) -> float:
        """k L of the longest wave's fluid."""
        c = max(region.medium.reference.speed for region in self.case.regions)
        return 2 * np.pi * self.frequency * self.lengths[0] / c

    def fluids(self) -> list[tuple[complex, complex]]:
        """rho and c with losses, front to back."""
        f = self.case.sweep.frequencies
        pairs = [damped(region.medium, region.damping, f) for region in self.case.regions]
        return [(complex(rho[0]), complex(c[0])) for rho, c in pairs]

    def impedance(self) -> complex:
        """Z of the wall at x = L [Pa s/m]."""
        wall = next(s.boundary for s in self.case.surfaces if isinstance(s.boundary, Impedance))
        assert isinstance(wall.wall, Given) and isinstance(wall.wall.value, complex)
        return wall.wall.value * self.case.regions[-1].medium.reference.rho_c


# ---------------------------------------------------------------------------------------------------------------------
# the boxes


def box(seed: int, two: bool, accuracy: float = 0.1) -> Box:
    """The box of a seed; its mesh is drawn again until it has 600 to 6000 tetrahedra."""
    rng = np.random.default_rng([seed, int(two), 17])
    while True:
        lengths = (1.0, *rng.uniform(0.5, 0.9, 2).tolist())
        size, coarse, ratio = rng.uniform(8, 16), rng.uniform(3.5, 6.5), rng.uniform(3, 6)
        speeds = (343.0, rng.uniform(250, 500)) if two else (343.0,)
        densities = (1.2, 1.2 * rng.uniform(0.5, 3))[: len(speeds)]
        cut = float(rng.uniform(0.35, 0.65)) if two else 0.0
        frequency = size * 343.0 / (2 * np.pi)
        largest = coarse / (2 * np.pi * frequency / min(speeds))
        nodes, tets = _graded_mesh(lengths, cut, largest / ratio, largest, rng)
        if FEWEST_TETS <= len(tets) <= MOST_TETS:
            break
    losses = rng.uniform(0.005, 0.03, 2) if two or seed % 2 else np.zeros(1)  # half of the single fluids are lossless
    regions = [
        Region(f"fluid {i}", GivenFluid(rho, c), LossFactor(float(eta)))
        for i, (rho, c, eta) in enumerate(zip(densities, speeds, losses, strict=False))
    ]
    zeta = complex(rng.uniform(0.5, 4), rng.uniform(-3, 1))
    case = _case(nodes, tets, cut, lengths[0], tuple(regions), zeta, Sweep(np.array([frequency]), accuracy=accuracy))
    k = 2 * np.pi * frequency / speeds[0]
    grid = np.stack(np.meshgrid(*[np.arange(40)] * 2, indexing="ij"), axis=-1).reshape(-1, 2)
    modes = grid[np.linalg.norm(grid * np.pi / np.array(lengths[1:]), axis=1) < 1.1 * k]
    amplitudes = rng.normal(size=len(modes)) + 1j * rng.normal(size=len(modes))
    receivers = (0.02 + 0.96 * rng.random((40, 3))) * np.array(lengths)
    return Box(f"{'two' if two else 'one'}{seed}", case, lengths, cut, modes, amplitudes, receivers, ratio)


def _graded_mesh(
    lengths: tuple[float, ...], cut: float, smallest: float, largest: float, rng: np.random.Generator
) -> tuple[Floats, Ints]:
    """Sizes by the distance from one to three random points or segments, as gmsh's threshold fields do it.

    The smallest size holds up to a distance of 0.03 to 0.12, the largest from 0.1 to 0.4 beyond it; linear between.
    """
    import gmsh

    ends = rng.random((int(rng.integers(1, 4)), 2, 3)) * np.array(lengths)
    ends[:, 1] = ends[:, 0] + rng.integers(0, 2, (len(ends), 1)) * (ends[:, 1] - ends[:, 0])
    near, seed = rng.uniform(0.03, 0.12), int(rng.integers(1, 1000))
    far = near + rng.uniform(0.1, 0.4)

    def size(dim: int, tag: int, x: float, y: float, z: float, given: float) -> float:
        return float(np.interp(_distance(np.array([x, y, z]), ends), [near, far], [smallest, largest]))

    gmsh.initialize(readConfigFiles=False, interruptible=False)
    try:
        gmsh.option.setNumber("General.Terminal", 0)
        for name in ("MeshSizeFromPoints", "MeshSizeExtendFromBoundary", "MeshSizeFromCurvature"):
            gmsh.option.setNumber(f"Mesh.{name}", 0)
        gmsh.option.setNumber("Mesh.RandomSeed", seed)
        parts = [gmsh.model.occ.addBox(0, 0, 0, cut or lengths[0], *lengths[1:])]
        if cut:
            parts.append(gmsh.model.occ.addBox(cut, 0, 0, lengths[0] - cut, *lengths[1:]))
            gmsh.model.occ.fragment([(3, parts[0])], [(3, parts[1])])
        gmsh.model.occ.synchronize()
        gmsh.model.mesh.setSizeCallback(size)
        gmsh.model.mesh.generate(3)
        tags, x, _ = gmsh.model.mesh.getNodes()
        _, corners = gmsh.model.mesh.getElementsByType(4)
    finally:
        gmsh.finalize()
    used, tets = np.unique(np.asarray(corners, dtype=np.int64), return_inverse=True)
    by_tag = np.argsort(tags)
    return x.reshape(-1, 3)[by_tag[np.searchsorted(tags[by_tag], used)]], tets.reshape(-1, 4)


def _distance(x: Floats, ends: Floats) -> float:
    """To the nearest of segments (n, 2, 3)."""
    along = ends[:, 1] - ends[:, 0]
    length = np.maximum(np.sum(along**2, axis=1), 1e-30)
    t = np.clip(np.sum((x - ends[:, 0]) * along, axis=1) / length, 0, 1)
    return float(np.min(np.linalg.norm(x - ends[:, 0] - t[:, None] * along, axis=1)))


def _case(
    nodes: Floats, tets: Ints, cut: float, length: float, regions: tuple[Region, ...], zeta: complex, sweep: Sweep
) -> Case:
    faces = np.sort(tets[:, [[1, 2, 3], [0, 2, 3], [0, 1, 3], [0, 1, 2]]].reshape(-1, 3), axis=1)
    found, count = np.unique(faces, axis=0, return_counts=True)
    skin = found[count == 1]
    x = nodes[skin][:, :, 0]
    surface = np.where(np.all(x < 1e-9, axis=1), 0, np.where(np.all(x > length - 1e-9, axis=1), 1, 2))
    kinds = Vibrating(), Impedance(Given(zeta)), Rigid()
    surfaces = tuple(Surface(n, kind) for n, kind in zip(("front", "end", "sides"), kinds, strict=True))
    region = (nodes[tets].mean(axis=1)[:, 0] > cut).astype(np.int64) if cut else np.zeros(len(tets), dtype=np.int64)
    return Case(Mesh(nodes, tets, region, skin, surface), regions, surfaces, sweep)


# ---------------------------------------------------------------------------------------------------------------------
# exact and discrete pressures


def exact(box: Box) -> Complex:
    """Pressures (40,) [Pa] at the receivers."""
    shape = np.pi * box.modes / np.array(box.lengths[1:])
    across = np.prod(np.cos(box.receivers[:, None, 1:] * shape), axis=2)
    total = np.zeros(len(box.receivers), dtype=np.complex128)
    for mode, amplitude in enumerate(box.amplitudes):
        total += amplitude * across[:, mode] * _along(box, float(np.sum(shape[mode] ** 2)))
    return total


def _along(box: Box, across: float) -> Complex:
    """p(x) (40,) of one mode of transverse wavenumber squared `across`, for v_n = 1 out of the fluid on x = 0.

    In each fluid p = A e^{-ik(x - x0)} + B e^{ik(x - x1)}, v_x = i/(w rho) dp/dx; p and v_x go through the interface.
    """
    w, ends = 2 * np.pi * box.frequency, [0.0, *([box.cut] if box.cut else []), box.lengths[0]]
    lines = []
    for (rho, c), x0, x1 in zip(box.fluids(), ends[:-1], ends[1:], strict=True):
        k = np.sqrt((w / c) ** 2 - across + 0j)
        lines.append((rho, -k if k.imag > 0 else k, x0, x1))

    def rows(line: int, x: npt.ArrayLike) -> tuple[Complex, Complex]:
        rho, k, x0, x1 = lines[line]
        waves = np.stack([np.exp(-1j * k * (np.asarray(x) - x0)), np.exp(1j * k * (np.asarray(x) - x1))], axis=-1)
        return waves, waves * np.array([k, -k]) / (w * rho)

    n = len(lines)
    matrix, right = np.zeros((2 * n, 2 * n), dtype=np.complex128), np.zeros(2 * n, dtype=np.complex128)
    matrix[0, :2], right[0] = rows(0, 0.0)[1], -1.0
    p, v = rows(n - 1, box.lengths[0])
    matrix[1, -2:] = p - box.impedance() * v
    if n == 2:
        (p0, v0), (p1, v1) = rows(0, box.cut), rows(1, box.cut)
        matrix[2:] = np.vstack([np.concatenate([p0, -p1]), np.concatenate([v0, -v1])])
    waves = np.linalg.solve(matrix, right).reshape(n, 2)
    x = box.receivers[:, 0]
    back = x > box.cut if box.cut else np.zeros(len(x), dtype=bool)
    return np.where(back, rows(n - 1, x)[0] @ waves[-1], rows(0, x)[0] @ waves[0])


@dataclass(frozen=True)
class Solution:
    """Orders, unknowns, and the rms error of the level over the receivers [dB]."""

    lowest: int
    highest: int
    unknowns: int
    error: float


def solve(box: Box, space: Space, reference: Complex) -> Solution:
    """The box on a space."""
    w, geometry, dofs = 2 * np.pi * box.frequency, space.geometry, space.dofs
    end, front = (next(s for s in space.sides if s.surface == i) for i in (1, 0))
    matrix: sp.csr_matrix = surface_mass(geometry, dofs, end.tet, end.face) * (1j * w / box.impedance())
    for index, (rho, c) in enumerate(box.fluids()):
        stiffness, mass = volume_matrices(geometry, dofs, np.flatnonzero(box.case.mesh.tet_region == index))
        matrix = matrix + stiffness / rho - mass * (w**2 / (rho * c**2))
    matrix = matrix.tocsr()
    load = surface_load(geometry, dofs, front.tet, front.face, lambda x: _velocity(box, x), degree=2 * space.order + 4)
    right = -1j * w * (load[:, :1] + 1j * load[:, 1:])
    lower = sp.tril(matrix).tocsc()
    lower.sort_indices()
    x, _ = solve_refined(analyse(lower).factor(lower.data), matrix, right)
    pressure = (evaluate(geometry, dofs, *geometry.locate(box.receivers)) @ x)[:, 0]
    error = 20 * np.log10(np.abs(pressure) / np.abs(reference))
    return Solution(int(dofs.orders.min()), dofs.max_order, dofs.n_dofs, float(np.sqrt(np.mean(error**2))))


def _velocity(box: Box, x: Floats) -> Floats:
    """Real and imaginary part (k, 2) of v on x = 0."""
    across = np.prod(np.cos(x[:, None, 1:] * (np.pi * box.modes / np.array(box.lengths[1:]))), axis=2)
    v = across @ box.amplitudes
    return np.stack([v.real, v.imag], axis=1)


# ---------------------------------------------------------------------------------------------------------------------
# the comparison


@dataclass(frozen=True)
class Comparison:
    """One mesh: the rule's solution, the a-priori error it expects, and the cheapest uniform order (None: none fits)."""

    box: Box
    rule: Solution
    expected: float
    uniform: Solution | None

    @property
    def ratio(self) -> float:
        return self.rule.unknowns / self.uniform.unknowns if self.uniform else float("nan")


def compare(box: Box) -> Comparison:
    """Solve with the rule's orders, and with uniform orders from 1 up until the accuracy is met."""
    reference, space = exact(box), discretise(box.case)
    rule = solve(box, space, reference)
    expected = float(expected_errors(box.case, space.topology, space.walls, space.dofs.orders).max())
    for order in range(1, 9):
        uniform = discretise(box.case, order)
        if uniform.dofs.n_dofs > MOST_UNKNOWNS:
            break
        found = solve(box, uniform, reference)
        if found.error <= box.case.sweep.accuracy:
            return Comparison(box, rule, expected, found)
    return Comparison(box, rule, expected, None)


def comparisons(accuracy: float = 0.1, first: int = 0, each: int = 10) -> Iterator[Comparison]:
    """`each` boxes of one fluid and as many of two."""
    for two in (False, True):
        for seed in range(first, first + each):
            yield compare(box(seed, two, accuracy))


def line(found: Comparison) -> str:
    """One row of the table."""
    b, r, u = found.box, found.rule, found.uniform
    text = f"{b.name:6s} kL {b.size:4.1f}  grading {b.grading:3.1f}  {len(b.case.mesh.tets):5d} tets  "
    text += f"orders {r.lowest}-{r.highest}  {r.unknowns:6d} unknowns  {r.error:.4f} dB (expected < {found.expected:.3f})"
    if u is None:
        return f"{text}  no uniform order up to {MOST_UNKNOWNS} unknowns"
    return f"{text}  uniform {u.highest}: {u.unknowns:6d}, {u.error:.4f} dB  ratio {found.ratio:.2f}"


@benchmark("orders")
def orders(quick: bool) -> Iterator[Row]:
    """Twenty graded boxes that no constant of the rule was fitted on."""
    accuracy = 0.1
    table = list(comparisons(accuracy, 20, 2 if quick else 10))
    ratios = np.array([found.ratio for found in table if found.uniform])
    met = float(np.mean([found.rule.error <= accuracy for found in table]))
    against = "cheapest uniform order that meets the accuracy, chosen with hindsight"
    exact = f"{len(table)} exact solutions, before orders are raised"
    yield Row(f"graded boxes within {accuracy:g} dB by the rule", met, "of all", exact, 1.0, at_least=True)
    yield Row("unknowns, mean", float(ratios.mean()), "x", against, 0.7)
    yield Row("unknowns, worst", float(ratios.max()), "x", against, 0.7)


def main() -> None:
    """Print the table of one accuracy [dB]; arguments: accuracy, first seed, seeds of each kind."""
    import sys

    given = [float(a) for a in sys.argv[1:]] + [0.1, 20, 10][len(sys.argv) - 1 :]
    started, table = time.monotonic(), []
    for found in comparisons(given[0], int(given[1]), int(given[2])):
        table.append(found)
        print(line(found), flush=True)
    errors, ratios = [f.rule.error / given[0] for f in table], [f.ratio for f in table if f.uniform]
    print(f"{sum(e <= 1 for e in errors)} of {len(table)} met, worst {max(errors):.2f} of the accuracy; unknowns against the")
    print(f"cheapest uniform order: mean {np.mean(ratios):.2f}, worst {max(ratios):.2f}, {time.monotonic() - started:.0f} s")


if __name__ == "__main__":
    main()
