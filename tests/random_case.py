"""Random cases for the certificate of reduced sweeps: every kind of term, load and output that a sweep can meet."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

import meshes
from cases import case_of
from murmesh.solver.case.boundary import Boundary, Impedance, Port, Pressure, Rigid, Sheet, Vibrating, VibratingTreated
from murmesh.solver.case.load import (
    Coherent,
    CrossSpectrum,
    Incoherent,
    IncomingWave,
    Load,
    LoadCase,
    Monopole,
    SurfacePressure,
    SurfaceVelocity,
)
from murmesh.solver.case.medium import Air, GivenFluid, LossFactor, PorousMedium, ReverberationTime, WallAbsorption
from murmesh.solver.case.model import Case, Receiver, Region
from murmesh.solver.case.motion import Shape, Uniform
from murmesh.solver.case.porous import Miki
from murmesh.solver.case.spectrum import PowerLaw, Spectrum, Table
from murmesh.solver.case.wall import AirGap, Given, Layers, MassSpringDamper, PorousLayer, Resonator

FIRST, LAST = 30.0, 420.0


def random_case(seed: int) -> Case:
    """A box with edges of 0.5 to 1.6 m and 40 to 120 lines; `seed` settles everything."""
    rng = np.random.default_rng(seed)
    lengths = 0.5 + 1.1 * rng.random(3)
    mesh = meshes.jiggled(meshes.box(2, 2, 2, tuple(lengths)), 0.1, seed)
    kinds: dict[str, Boundary] = {name: Rigid() for name in mesh.surfaces}
    if rng.random() < 0.3:
        shelf = meshes.faces_where(
            meshes.box(2, 2, 2, tuple(lengths)), lambda x: (x[..., 0] == lengths[0] / 2) & (x[..., 1] <= lengths[1] / 2)
        )
        mesh = replace(mesh, surfaces={**mesh.surfaces, "shelf": shelf})
        kinds["shelf"] = Sheet(Rigid(), Rigid(), transfer=Given(_table(rng, 0.2, 1.0)), front_direction=(1.0, 0.0, 0.0))
    for name, kind in zip(("x1", "y1", "z1"), rng.permutation([_wall(rng), _wall(rng), Rigid()]), strict=True):
        kinds[name] = kind
    kinds["x0"] = kinds["z0"] = Vibrating()
    kinds["y0"] = [Vibrating(), Port(), Pressure(), VibratingTreated(_law(rng))][rng.integers(4)]
    eta = float(0.002 * 50 ** rng.random())
    damping = [LossFactor(eta), ReverberationTime(float(0.1 + rng.random())), WallAbsorption(0.01 + 0.1 * float(rng.random()))]
    air = Region("air", Air(), damping[rng.integers(3)])
    regions, tet_region = (air,), None
    if rng.random() < 0.3:
        tet_region = (mesh.centroids[:, 2] > lengths[2] / 2).astype(np.int64)
        second = [PorousMedium(Miki(float(3000 + 30000 * rng.random()))), GivenFluid(1.8, 270.0)][rng.integers(2)]
        regions = (air, Region("other", second))
    cases = tuple(_load_case(rng, f"case{i}", lengths, kinds) for i in range(1 + int(rng.random() < 0.4)))
    count = int(rng.integers(40, 121))
    lines = np.linspace(FIRST, LAST, count) if rng.random() < 0.6 else np.sort(rng.uniform(FIRST, LAST, count))
    case = case_of(
        mesh, kinds, cases[0], lines, {}, regions=regions, tet_region=tet_region,
        order=int(rng.integers(3, 6)), error_bar=False, method="reduced",
    )  # fmt: skip
    return case.with_(load_cases=cases, receivers=_receivers(rng, lengths))


def _table(rng: np.random.Generator, low: float, high: float) -> Table:
    """A table with kinks."""
    f = np.unique(np.concatenate([[FIRST, LAST], rng.uniform(FIRST, LAST, 6)]))
    return Table(f, rng.uniform(low, high, len(f)) + 1j * rng.uniform(-high, high, len(f)))


def _law(rng: np.random.Generator) -> Given | Layers | MassSpringDamper | Resonator:
    porous = PorousLayer(Miki(float(5000 + 20000 * rng.random())), float(0.02 + 0.05 * rng.random()))
    laws = (Given(_table(rng, 0.5, 8.0)), Layers((porous, AirGap(0.02))), MassSpringDamper.example(), Resonator.example())
    return laws[rng.integers(4)]  # type: ignore[return-value]


def _wall(rng: np.random.Generator) -> Boundary:
    return Impedance(_law(rng))


def _spectrum(rng: np.random.Generator, size: float) -> complex | Spectrum:
    value = complex(size * np.exp(2j * np.pi * rng.random()))
    return (value, PowerLaw(value, 100.0, -6.0), Table(np.array([FIRST, 150.0, LAST]), value * np.array([1, 2j, 0.3])))[
        rng.integers(3)
    ]


def _load_case(rng: np.random.Generator, name: str, lengths: np.ndarray, kinds: dict[str, Boundary]) -> LoadCase:
    loads: list[Load] = [
        SurfaceVelocity("x0", Uniform(_spectrum(rng, 1e-3))),
        SurfaceVelocity("z0", Shape("cos(3*x) + y", _spectrum(rng, 1e-3))),
    ]
    kind = kinds["y0"]
    if kind.moves:
        loads.append(SurfaceVelocity("y0", Uniform(_spectrum(rng, 5e-4))))
    elif kind.takes_wave:
        loads.append(IncomingWave("y0", _spectrum(rng, 0.5)))
    else:
        loads.append(SurfacePressure("y0", _spectrum(rng, 0.5)))
    if rng.random() < 0.4:
        loads.append(Monopole("source", tuple(0.37 * lengths), _spectrum(rng, 1e-4)))
    rule = rng.integers(3)
    if rule == 2:
        root = rng.normal(size=(2, len(loads), 2)) + 1j * rng.normal(size=(2, len(loads), 2))
        return LoadCase(
            name,
            tuple(loads),
            "tones",
            combination=CrossSpectrum(np.array([FIRST, LAST]), root @ root.conj().transpose(0, 2, 1)),
        )
    return LoadCase(name, tuple(loads), "tones", combination=(Coherent(), Incoherent())[rule])


def _receivers(rng: np.random.Generator, lengths: np.ndarray) -> tuple[Receiver, ...]:
    """None, points, ears with a sphere, or a point in the middle, where many modes have a node."""
    places = lengths * (0.15 + 0.7 * rng.random((3, 3)))
    kind = rng.integers(5)
    if kind == 0:
        return ()
    if kind == 1:
        return (Receiver("middle", tuple(0.5 * lengths)),)
    radius = 0.05 * float(kind == 2)
    return tuple(Receiver(f"r{i}", tuple(place), radius) for i, place in enumerate(places[: rng.integers(1, 4)]))
