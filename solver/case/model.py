"""The case: everything the solver is told. Anyone may write one without murmesh (see `hdf5.py` for the file).

Frozen records of plain numbers; a case is checked when it is made, and a changed case is a changed copy (`with_`).
"""

from __future__ import annotations

import hashlib
from collections.abc import Iterable, Iterator
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.boundary import Boundary, Sheet
from murmesh.solver.case.catalogue import Limits, Ranges, Treatment
from murmesh.solver.case.fields import Declared, quantity, record, to_tree
from murmesh.solver.case.load import IncomingWave, LoadCase, Monopole, SurfacePressure, SurfaceVelocity
from murmesh.solver.case.medium import Damping, Medium, NoDamping
from murmesh.solver.case.spectrum import Spectrum
from murmesh.solver.errors import CaseError, FieldError, nearest

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
NO_SURFACE = -1
HIGHEST_ORDER = 8


@record
class Mesh(Declared):
    """Tetrahedra of order 1 or 2 and the triangles that carry surfaces; node numbers start at 0.

    Order 2: mid-edge nodes follow the corners in the order 01, 12, 02, 03, 13, 23 (tets) and 01, 12, 02 (triangles).
    """

    nodes: npt.NDArray[np.float64] = quantity(help="coordinates, (n, 3)", unit="m")
    tets: npt.NDArray[np.int64] = quantity(help="node numbers, (t, 4) or (t, 10)", low=0)
    tet_region: npt.NDArray[np.int64] = quantity(help="index of each tet's region, (t,)", low=0)
    triangles: npt.NDArray[np.int64] = quantity(help="node numbers, (m, 3) or (m, 6)", low=0)
    triangle_surface: npt.NDArray[np.int64] = quantity(help="index of each triangle's surface, (m,); -1 for none", low=-1)

    def validate(self) -> None:
        if self.nodes.ndim != 2 or self.nodes.shape[1] != 3:
            raise FieldError(f"mesh/nodes must be (n, 3), got {self.nodes.shape}")
        self._check_cells("tets", self.tets, self.tet_region, (4, 10))
        self._check_cells("triangles", self.triangles, self.triangle_surface, (3, 6))
        if len(self.tets) == 0:
            raise FieldError("mesh/tets is empty; mesh the volume and give it a physical group")

    def _check_cells(self, name: str, cells: Ints, index: Ints, widths: tuple[int, int]) -> None:
        if cells.ndim != 2 or cells.shape[1] not in widths:
            raise FieldError(f"mesh/{name} must be (n, {widths[0]}) or (n, {widths[1]}), got {cells.shape}")
        if len(index) != len(cells):
            raise FieldError(f"mesh/{name} has {len(cells)} rows but its index has {len(index)}; give one per row")
        if cells.size and cells.max() >= len(self.nodes):
            raise FieldError(f"mesh/{name} names node {cells.max()}, but there are only {len(self.nodes)} (from 0)")


@record
class Region(Declared):
    """A volume filled with one medium."""

    name: str = quantity(help="name of the region")
    medium: Medium = quantity(help="the fluid or porous material in it")
    damping: Damping = quantity(help="its losses, as they were measured", default=NoDamping())


@record
class Surface(Declared):
    """A named set of triangles with its boundary kind."""

    name: str = quantity(help="name of the surface")
    boundary: Boundary = quantity(help="what the surface is")


@record
class Measured(Declared):
    """A measured spectrum to lay over the computed one."""

    frequencies: npt.NDArray[np.float64] = quantity(help="frequencies, (nf,)", unit="Hz", positive=True)
    levels: npt.NDArray[np.float64] = quantity(help="levels re 20 uPa, (nf,)", unit="dB")

    def validate(self) -> None:
        if self.frequencies.shape != self.levels.shape:
            raise FieldError(f"measured spectrum: {len(self.frequencies)} frequencies, {len(self.levels)} levels")


@record
class Receiver(Declared):
    """A microphone or ear. With a radius, the mean square over a small sphere replaces the value at the point."""

    name: str = quantity(help="name of the receiver")
    position: tuple[float, float, float] = quantity(help="x, y, z", unit="m")
    radius: float = quantity(help="radius of the averaging sphere; 0 for the point", unit="m", low=0.0, default=0.0)
    measured: Measured | None = quantity(help="measured spectrum to lay over the computed one", default=None)


@record
class Sweep(Declared):
    """The frequencies to solve, and how."""

    frequencies: npt.NDArray[np.float64] = quantity(help="lines, increasing, (nf,)", unit="Hz", positive=True)
    order: int = quantity(
        help="polynomial order of the elements, 1..8; 0: of every element by itself, from the accuracy",
        low=0,
        high=HIGHEST_ORDER,
        default=0,
    )
    accuracy: float = quantity(help="accuracy wanted at the receivers", unit="dB", positive=True, default=0.1)
    method: str = quantity(
        help="reduced: a certified model of all lines; direct: every line by itself; auto: reduced if there are many lines",
        choices=("auto", "reduced", "direct"),
        default="auto",
    )
    tolerance: float = quantity(
        help="difference from the direct solution that a reduced sweep may make on any line",
        unit="dB",
        positive=True,
        default=0.01,
    )
    error_bar: bool = quantity(help="estimate the mesh error of every receiver level in the next order", default=True)
    field_frequencies: npt.NDArray[np.float64] = quantity(
        help="lines whose whole field is kept for maps, (k,)", unit="Hz", positive=True, default=np.empty(0)
    )

    def validate(self) -> None:
        if self.frequencies.ndim != 1 or len(self.frequencies) == 0:
            raise FieldError("the sweep has no frequency; give start, stop and step, or a list")
        if np.any(np.diff(self.frequencies) <= 0):
            raise FieldError("sweep frequencies must increase strictly; sort them and remove duplicates")
        for f in self.field_frequencies:
            if not np.any(np.isclose(self.frequencies, f, rtol=1e-9)):
                raise FieldError(f"a field is asked at {f:g} Hz, which is not a line of the sweep; add it to the sweep")

    @classmethod
    def grid(cls, start: float, stop: float, step: float, extra: Iterable[float] = (), **options: Any) -> Sweep:
        """Lines start, start + step, ... <= stop, with `extra` lines (tones) put between them."""
        if not (0 < start <= stop and step > 0):
            raise FieldError(f"sweep {start:g} .. {stop:g} Hz in steps of {step:g}: give 0 < start <= stop and step > 0")
        count = int(np.floor((stop - start) / step * (1 + 1e-12) + 1e-9)) + 1
        lines = np.concatenate([start + step * np.arange(count), np.asarray(tuple(extra), dtype=np.float64)])
        return cls(np.unique(np.round(lines, 9)), **options)


@record
class Case(Declared):
    """Mesh, regions, surfaces, receivers, load cases, sweep and catalogue, checked against each other."""

    mesh: Mesh = quantity(help="the mesh")
    regions: tuple[Region, ...] = quantity(help="volumes")
    surfaces: tuple[Surface, ...] = quantity(help="surfaces with a boundary kind")
    sweep: Sweep = quantity(help="frequencies")
    load_cases: tuple[LoadCase, ...] = quantity(help="operating states", default=())
    receivers: tuple[Receiver, ...] = quantity(help="microphones and ears", default=())
    catalogue: tuple[Treatment, ...] = quantity(help="treatments to choose from", default=())
    limits: Limits = quantity(help="what a choice of treatments must keep to", default=Limits())
    ranges: Ranges = quantity(help="what is not known exactly, for the spread of gains", default=Ranges())
    title: str = quantity(help="title of the case", default="")

    def validate(self) -> None:
        for group in ("regions", "surfaces", "load_cases", "receivers", "catalogue"):
            _unique(group, [item.name for item in getattr(self, group)])
        _indices("mesh/tet_region", self.mesh.tet_region, len(self.regions), "regions")
        _indices("mesh/triangle_surface", self.mesh.triangle_surface, len(self.surfaces), "surfaces")
        for load_case in self.load_cases:
            _check_load_case(self, load_case)
        self._check_sheets()

    def _check_sheets(self) -> None:
        regions = [region.name for region in self.regions]
        for surface in self.surfaces:
            kind = surface.boundary
            if isinstance(kind, Sheet) and kind.front_region is not None and kind.front_region not in regions:
                raise CaseError(
                    f"surfaces/{surface.name}: front_region '{kind.front_region}' is not a region; "
                    f"{nearest(kind.front_region, regions)}"
                )

    def surface(self, name: str) -> Surface:
        """The surface called `name`."""
        for surface in self.surfaces:
            if surface.name == name:
                return surface
        raise CaseError(f"no surface is called '{name}'; {nearest(name, [s.name for s in self.surfaces])}")

    def load_case(self, name: str = "") -> LoadCase:
        """The load case called `name`; the first one if no name is given."""
        if not self.load_cases:
            raise CaseError("the case has no load case, so nothing drives the air; add a surface velocity or a source")
        for load_case in self.load_cases:
            if name in ("", load_case.name):
                return load_case
        raise CaseError(f"no load case is called '{name}'; {nearest(name, [c.name for c in self.load_cases])}")

    @property
    def panels(self) -> tuple[str, ...]:
        """Names of the surfaces that move in some load case, in the order of the surfaces."""
        moving = {load.acts_on for case in self.load_cases for load in case.loads if isinstance(load, SurfaceVelocity)}
        return tuple(surface.name for surface in self.surfaces if surface.name in moving)

    @cached_property
    def checksum(self) -> str:
        """SHA-256 over every name and number of the case."""
        digest = hashlib.sha256()
        for item in _flatten(to_tree(self)):
            digest.update(item)
        return digest.hexdigest()


def _flatten(tree: object, path: str = "") -> Iterator[bytes]:
    if isinstance(tree, dict):
        for key in sorted(tree):
            yield from _flatten(tree[key], f"{path}/{key}")
    elif isinstance(tree, list):
        for index, item in enumerate(tree):
            yield from _flatten(item, f"{path}/{index}")
    elif isinstance(tree, np.ndarray):
        yield f"{path}={tree.dtype.str}{tree.shape}".encode() + np.ascontiguousarray(tree).tobytes()
    else:
        yield f"{path}={tree!r}".encode()


def _unique(group: str, names: list[str]) -> None:
    for name in names:
        if not name:
            raise CaseError(f"{group}: an entry has no name; name it")
        if names.count(name) > 1:
            raise CaseError(f"{group}: the name '{name}' is used twice; rename one")


def _indices(path: str, index: Ints, count: int, what: str) -> None:
    if index.size and index.max() >= count:
        raise CaseError(f"{path} holds {index.max()}, but there are only {count} {what} (numbered from 0)")


def _check_load_case(case: Case, load_case: LoadCase) -> None:
    for load in load_case.loads:
        if not load.acts_on:
            continue
        where = f"load_cases/{load_case.name}/{load.name}"
        try:
            boundary = case.surface(load.acts_on).boundary
        except CaseError as error:
            raise CaseError(f"{where}: {error}") from None
        able, cure = {
            SurfaceVelocity: (boundary.moves, "vibrating or vibrating_treated"),
            SurfacePressure: (boundary.fixes_pressure, "pressure"),
            IncomingWave: (boundary.takes_wave, "port"),
        }[type(load)]
        if not able:
            raise CaseError(
                f"{where}: a surface of kind '{boundary.kind_name}' cannot carry a {load.kind_name}; make it {cure}"
            )


__all__ = [
    "Case", "LoadCase", "Measured", "Mesh", "Monopole", "Receiver", "Region", "Spectrum", "Surface", "Sweep", "Treatment",
]  # fmt: skip
