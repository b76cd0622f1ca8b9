"""How exact the outside is: surface, far field and condition numbers against closed forms (references B01b, B05, B05b)."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import numpy.typing as npt
from exterior_shells import Shell, hankel, open_end
from scipy.special import eval_legendre, j1

import meshes
from bench import Row, benchmark
from murmesh.solver.envelope import Ground
from reading import read_csv_reference

Floats = npt.NDArray[np.float64]


@benchmark("exterior")
def exterior(quick: bool) -> Iterator[Row]:
    """Sphere, spheroid and baffled piston; `quick` takes coarser meshes, which miss the targets by their geometry."""
    yield from sphere(2 if quick else 4)
    yield Row("condition number, 3:1 spheroid, ka = 20", slender(2 if quick else 4), "", "limit of the issue", 5e3)
    yield from piston(quick)
    yield from mouth(quick)


def sphere(n: int) -> Iterator[Row]:
    """Modal impedances of a sphere in a thin shell of air, order 5, eight radial functions (B01b's closed form)."""
    shell = Shell(meshes.shell(n, (1.0, 1.1)), 5)
    errors, powers = [], []
    for ka in (1.0, 5.0, 10.0, 20.0):
        for harmonic in (0, 1, 3, 5, 7):
            load = shell.load("inner", lambda x, m=harmonic: eval_legendre(m, x[:, 2] / np.maximum(_norm(x), 1e-9)))
            u = shell.solve(ka, 1j * ka * load)
            h, dh = hankel(harmonic, ka)
            found = load @ u * (2 * harmonic + 1) / (4 * np.pi)
            errors.append(abs(20 * np.log10(abs(found / (-1j * h / dh)))))
            if harmonic == 1:
                powers.append(abs(shell.outside.far_power(u, ka, 1.0) / shell.outside.surface_power(u, ka, ka) - 1))
    yield Row("sphere, impedance, n <= 7, ka <= 20", max(errors), "dB", "spherical Hankel functions", 0.01)
    yield Row("oscillating sphere, power of the far field", max(powers), "", "that of the surface")
    yield Row("condition number, sphere, ka <= 20", max(shell.envelope.condition(k) for k in (1.0, 10.0, 20.0)), "", "", 1e3)


def slender(n: int) -> float:
    """Largest condition number on a 3:1 spheroid."""
    return Shell(meshes.shell(n, (1.0, 1.1), (1 / 3, 1 / 3, 1.0)), 5).envelope.condition(20.0)


def piston(quick: bool) -> Iterator[Row]:
    """A piston of radius 1 in a rigid baffle: D = 2 J1(ka sin t) / (ka sin t) (Kinsler & Frey 7.4)."""
    radii = (0.0, 0.5, 1.0, 1.3) if quick else (0.0, 0.3, 0.6, 0.85, 1.0, 1.15, 1.3)
    dome = Shell(meshes.dome(len(radii) - 1, radii), 5, radial=12, ground=Ground.of((0, 0, 1), 1))
    load = sum(dome.load(f"disc_{i}") for i in range(radii.index(1.0)))
    angle = np.radians(np.arange(0.0, 90.1, 5.0))
    directions = np.column_stack([np.sin(angle), 0 * angle, np.cos(angle)])
    worst = []
    for ka in (1.0, 3.0, 10.0):
        found = dome.outside.far_rows(directions, ka) @ dome.solve(ka, 1j * ka * load)
        exact = 0.5 * ka * _directivity(ka * np.sin(angle))
        loud = np.abs(exact) > 0.1 * np.abs(exact).max()
        worst.append(np.abs(20 * np.log10(np.abs(found / exact)))[loud].max())
    yield Row("piston, far field within 20 dB, ka <= 10", float(max(worst)), "dB", "2 J1(x) / x", 0.01)


def mouth(quick: bool) -> Iterator[Row]:
    """The mouth of a round pipe in a rigid flange (B07), to ka = 3.5: the edge's singular field asks for fine rings."""
    radii, length = ((0.0, 0.5, 1.0, 1.4), 3) if quick else ((0.0, 0.4, 0.7, 0.9, 1.0, 1.1, 1.3), 3)
    layers = np.concatenate([np.linspace(-length, -0.4, 2 * length), [-0.15, 0.0]])
    shell = Shell(meshes.flanged_pipe(radii, layers), 4, ground=Ground.of((0, 0, 1), 1), centre=(0.0, 0.0, 0.0))
    table = read_csv_reference("B07_flanged_pipe.csv")
    rows = [row for row in zip(table["ka"], table["absR"], table["l_over_a"], strict=True) if row[0] >= 0.3]
    off = [
        (abs(size / r - 1), abs(end - length_))
        for ka, r, length_ in rows
        for size, end in [open_end(shell, length, float(ka))]
    ]
    yield Row("flanged pipe, |R|, ka <= 3.5", float(max(o[0] for o in off)), "", "Zorumski, 24 modes (B07)", 0.01)
    yield Row("flanged pipe, end correction l/a", float(max(o[1] for o in off)), "", "the same", 0.01)


def _directivity(x: Floats) -> Floats:
    return np.where(x > 0, 2 * j1(x) / np.where(x > 0, x, 1.0), 1.0)


def _norm(x: Floats) -> Floats:
    return np.asarray(np.linalg.norm(x, axis=1))
