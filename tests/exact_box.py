"""A box with a closed-form sound field: a patterned piston at x = 0, a locally reacting wall at x = L, rigid sides.

    v(y, z) = sum_mn a_mn cos(m pi y / b) cos(n pi z / h),   p = sum_mn a_mn cos cos C [cos k_x (x - L) + S sin k_x (x - L)]
    k_x^2 = k^2 - (m pi / b)^2 - (n pi / h)^2,   S = -i w rho / (Z k_x),   C k_x (sin k_x L + S cos k_x L) = -i w rho

(separation of variables; v into the air, dp/dn = -i w rho v_n)
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from cases import AIR, case_of, lossy
from meshes import grid
from murmesh.solver.case.boundary import Impedance, Vibrating
from murmesh.solver.case.load import SurfaceVelocity
from murmesh.solver.case.medium import damped
from murmesh.solver.case.model import Case
from murmesh.solver.case.motion import Shape
from murmesh.solver.case.wall import Given

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]


@dataclass(frozen=True)
class ExactBox:
    """Lengths [m], pattern a_mn by (m, n), Z in rho c, loss factor of the air."""

    lengths: tuple[float, float, float]
    pattern: Mapping[tuple[int, int], float]
    impedance: complex
    loss: float

    def case(self, planes: tuple[Floats, Floats, Floats], frequencies: Floats, receivers: Floats, **sweep: object) -> Case:
        """The box on a grid of node planes, receivers (k, 3) called r0, r1, ..."""
        _, width, height = self.lengths
        text = " + ".join(
            f"({a!r})*cos({m * np.pi / width!r}*y)*cos({n * np.pi / height!r}*z)" for (m, n), a in self.pattern.items()
        )
        kinds = {"x0": Vibrating(), "x1": Impedance(Given(complex(self.impedance), "rho_c"))}
        names = {f"r{i}": tuple(float(v) for v in x) for i, x in enumerate(receivers)}
        loads = [SurfaceVelocity("x0", Shape(text, 1.0 + 0j))]
        return case_of(grid(*planes), kinds, loads, frequencies, names, damping=lossy(self.loss), **sweep)  # type: ignore[arg-type]

    def pressure(self, points: Floats, f: float) -> Complex:
        """p (k,) at points (k, 3)."""
        rho, c = (complex(v[0]) for v in damped(AIR, lossy(self.loss), np.array([f])))
        w, (length, width, height) = 2 * np.pi * f, self.lengths
        x, y, z = points.T
        total = np.zeros(len(points), dtype=np.complex128)
        for (m, n), a in self.pattern.items():
            k = np.sqrt((w / c) ** 2 - (m * np.pi / width) ** 2 - (n * np.pi / height) ** 2 + 0j)
            s = -1j * w * rho / (self.impedance * 1.21 * 343.0 * k)
            size = -1j * w * rho / (k * (np.sin(k * length) + s * np.cos(k * length)))
            across = np.cos(m * np.pi * y / width) * np.cos(n * np.pi * z / height)
            total += a * size * across * (np.cos(k * (x - length)) + s * np.sin(k * (x - length)))
        return total


def random_box(rng: np.random.Generator) -> ExactBox:
    """Edges 0.6 to 1.4 m, four cross modes, a wall between soft and hard, loss factors 0.3 to 10 %."""
    lengths = tuple(float(v) for v in 0.6 + 0.8 * rng.random(3))
    pattern = {(int(m), int(n)): float(rng.normal()) for m, n in rng.integers(0, 3, size=(4, 2))}
    impedance = complex(0.5 + 6 * rng.random(), 6 * rng.normal())
    return ExactBox((lengths[0], lengths[1], lengths[2]), pattern, impedance, float(0.003 * 30 ** rng.random()))


def random_planes(rng: np.random.Generator, lengths: tuple[float, float, float], cells: int) -> tuple[Floats, Floats, Floats]:
    """Graded node planes, cell sizes varying threefold."""
    steps = [np.cumsum(1 + 2 * rng.random(cells)) for _ in lengths]
    planes = [np.concatenate([[0.0], s / s[-1] * length]) for s, length in zip(steps, lengths, strict=True)]
    return planes[0], planes[1], planes[2]
