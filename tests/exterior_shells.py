"""A shell (or dome) of air on infinite elements, solved without cases and sweeps: for tests and benchmarks of the elements."""

from __future__ import annotations

import numpy as np
from numpy.polynomial.legendre import leggauss
from scipy.special import spherical_jn, spherical_yn

import meshes
from murmesh.solver.assembly import DofMap, Geometry, evaluate, face_dofs, surface_load, volume_matrices
from murmesh.solver.envelope import Ground, envelope
from murmesh.solver.exterior import Exterior
from murmesh.solver.linalg import analyse, solve_refined
from murmesh.solver.topology import Topology


def hankel(n: int, x: float) -> tuple[complex, complex]:
    """h_n^(2) and its derivative."""
    both = [f(n, x, d) for d in (False, True) for f in (spherical_jn, spherical_yn)]
    return complex(both[0], -both[1]), complex(both[2], -both[3])


class Shell:
    """A thin shell of air around a body, on infinite elements; solved with SciPy alone."""

    def __init__(
        self, mesh: meshes.TestMesh, order: int, radial: int = 8, ground: Ground | None = None, centre: object = None
    ) -> None:
        self.mesh, self.geometry = mesh, Geometry(mesh.nodes, mesh.tets)
        self.topology = Topology.build(mesh.tets)
        self.dofs = DofMap.build(self.topology, order)
        self.envelope = envelope(self.geometry, self.dofs, self.side("outer"), radial=radial, ground=ground, centre=centre)  # type: ignore[arg-type]
        self.size = self.dofs.n_dofs + self.envelope.extra
        self.outside = Exterior(self.envelope, self.size)

    def side(self, name: str) -> tuple[np.ndarray, np.ndarray]:
        tet, face = self.topology.sides_of(self.mesh.surfaces[name])
        return tet[:, 0], face[:, 0]

    def load(self, name: str, values: object = None) -> np.ndarray:
        out = np.zeros(self.size)
        out[: self.dofs.n_dofs] = surface_load(self.geometry, self.dofs, *self.side(name), values)
        return out

    def solve(self, k: float, load: np.ndarray) -> np.ndarray:
        inside = sum(c * m for c, m in zip((1.0, -k * k), volume_matrices(self.geometry, self.dofs), strict=True))
        inside.resize((self.size, self.size))
        free = np.ones(self.size, dtype=bool)
        if self.envelope.held.any():  # the air between body and dome meets the pressure-release ground too
            free[self.envelope.numbers[self.envelope.held]] = False
            free[face_dofs(self.dofs, *self.side("rim"))] = False
        matrix = (inside + self.outside.operator(k))[free][:, free].tocsc()
        matrix.sort_indices()
        factor = analyse(matrix, symmetric=False).factor(matrix.data)
        out = np.zeros(self.size, dtype=np.complex128)
        out[free] = solve_refined(factor, matrix.tocsr(), load[free, None].astype(np.complex128))[0][:, 0]
        return out


def open_end(shell: Shell, length: float, ka: float) -> tuple[float, float]:
    """Reflection R = -|R| e^{-2ikl} at the mouth z = 0 of `meshes.flanged_pipe` with a piston at z = -length; |R| and l/a.

    From the mean pressure of six sections: higher modes of the pipe have none, but for those of rotation.
    """
    u = shell.solve(ka, 1j * ka * shell.load("bottom"))
    sections = -length + np.linspace(0.2, min(1.2, length - 1.5), 6)
    gauss, weights = leggauss(4)
    ring, angle = np.sqrt(0.5 * (gauss + 1)) * 0.999, np.arange(8) * np.pi / 4 + 0.2
    mean = []
    for z in sections:
        points = np.array([(r * np.cos(t), r * np.sin(t), z) for r in ring for t in angle])
        tet, bary = shell.geometry.locate(points)
        p = evaluate(shell.geometry, shell.dofs, tet, bary) @ u[: shell.dofs.n_dofs]
        mean.append(0.5 * weights @ p.reshape(len(ring), len(angle)).mean(axis=1))
    waves = np.stack([np.exp(-1j * ka * sections), np.exp(1j * ka * sections)], axis=1)
    out, back = np.linalg.lstsq(waves, np.array(mean), rcond=None)[0]
    return abs(back / out), float((-np.angle(-back / out) / (2 * ka)) % (np.pi / ka))
