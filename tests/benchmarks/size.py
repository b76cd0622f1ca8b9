"""Cost against size: assembly, analysis, factorisation and solve at order 3, n from 10k to 400k, and fitted exponents."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from bench import Row, benchmark, exponent, lower, peaked, timed
from meshes import box
from murmesh.solver.dofs import DofMap
from murmesh.solver.elements.geometry import Geometry
from murmesh.solver.linalg import analyse
from murmesh.solver.memory import available_memory
from murmesh.solver.topology import Topology
from murmesh.solver.volumes import volume_matrices

ORDER = 3
CELLS = (7, 10, 15, 20, 24)  # n = (3 cells + 1)^3: 10 648, 29 791, 97 336, 226 981, 389 017
BYTES_PER_UNKNOWN = 25_000  # of the largest, with room


@benchmark("size")
def size(quick: bool) -> Iterator[Row]:
    table: dict[str, list[float]] = {}
    sizes: list[float] = []
    for cells in CELLS[:3] if quick else CELLS:
        n = (ORDER * cells + 1) ** 3
        if BYTES_PER_UNKNOWN * n > available_memory():
            yield Row(f"size n={n}", float("nan"), "", "left out: not enough memory is free")
            continue
        sizes.append(n)
        for stage, (value, unit) in _stages(cells).items():
            table.setdefault(stage, []).append(value)
            yield Row(f"size n={n}: {stage}", value, unit)
    for stage, values in table.items():
        yield Row(f"size, exponent of n: {stage}", exponent(sizes, values), "", f"n = {sizes[0]:.0f} .. {sizes[-1]:.0f}")


def _stages(cells: int) -> dict[str, tuple[float, str]]:
    mesh = box(cells, cells, cells)

    def assemble() -> tuple[object, ...]:
        return volume_matrices(Geometry(mesh.nodes, mesh.tets), DofMap.build(Topology.build(mesh.tets), ORDER))

    (stiffness, mass), assembly = timed(assemble)
    pattern = lower(stiffness - 64 * (1 - 0.03j) * mass)
    del stiffness, mass
    analysis, symbolic = timed(lambda: analyse(pattern))
    (factor, numeric), peak = peaked(lambda: timed(lambda: analysis.factor(pattern.data)))
    b = np.ones((pattern.shape[0], 1), dtype=np.complex128)
    _, solve = timed(lambda: factor.solve(b))
    return {
        "assembly": (assembly, "s"),
        "analysis": (symbolic, "s"),
        "factorisation": (numeric, "s"),
        "solve, one right-hand side": (solve, "s"),
        "factorisation, peak memory": (peak, "MiB"),
    }
