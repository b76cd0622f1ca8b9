"""A job: what to compute, said by the names of groups and independent of any mesh.

    job = (
        Job(title="cab")
        .region("cabin_air", Air(20.0), ReverberationTime(0.15))
        .surface("floor_*", Vibrating(), velocity=1e-3)
        .surface("roof", VibratingTreated(Layers(...)), velocity=Uniform(Table(...)), where=Rule(facing=(0, 0, 1)))
        .receiver("left ear", (0.5, 0.1, 1.2), radius=0.05)
        .with_sweep(40, 500, 2)
    )

The same in a TOML file: see `job_text`. Names may be globs (`door_*`); an exact name wins over globs.
"""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path
from typing import Any

import numpy as np

from murmesh.plugin.gmsh_session import CAD
from murmesh.plugin.mesh_source import UNITS, TaggedMesh, element_size, read_mesh
from murmesh.plugin.wrapping import Wrap
from murmesh.solver.case.boundary import Boundary
from murmesh.solver.case.catalogue import Limits, Ranges, Treatment
from murmesh.solver.case.fields import Declared, quantity, record
from murmesh.solver.case.load import (
    Coherent,
    Combination,
    IncomingWave,
    Load,
    LoadCase,
    Monopole,
    SurfacePressure,
    SurfaceVelocity,
)
from murmesh.solver.case.medium import Damping, Medium, NoDamping
from murmesh.solver.case.model import Measured, Receiver, Sweep
from murmesh.solver.case.motion import Motion, Uniform
from murmesh.solver.case.spectrum import Spectrum
from murmesh.solver.errors import CaseError, FieldError

Vector = tuple[float, float, float]
DEFAULT_LOAD_CASE = "default"
GLOB_SIGNS = "*?["


def is_glob(name: str) -> bool:
    """Whether a name is a pattern."""
    return any(sign in name for sign in GLOB_SIGNS)


@record
class Rule(Declared):
    """Where a surface (or region) lies: it survives remeshing and boolean operations, and needs no group."""

    inside: tuple[Vector, Vector] | None = quantity(
        help="two opposite corners of a box that holds the centroid of every triangle", unit="m", default=None
    )
    facing: Vector | None = quantity(help="direction of the normal out of the air, e.g. [0, 0, 1] for a roof", default=None)
    within_deg: float = quantity(help="largest angle to `facing`", unit="deg", low=0.0, high=180.0, default=30.0)
    of: str = quantity(help="only triangles of these groups (name or glob); default: the outer boundary", default="")

    def validate(self) -> None:
        if self.inside is None and self.facing is None and not self.of:
            raise FieldError("a rule says nothing; give inside, facing, of, or several of them")
        if self.facing is not None and not np.any(self.facing):
            raise FieldError("facing = [0, 0, 0] is no direction; give for instance [0, 0, 1]")


@record
class MeshFile(Declared):
    """Where the mesh or the geometry is, and how to mesh it."""

    file: str = quantity(help="mesh, geometry or gmsh script; relative to the job file")
    unit: str | None = quantity(help="unit of its coordinates (default: metres, or the file's own)", default=None)
    size: float | None = quantity(help="largest element size", unit="m", positive=True, default=None)
    size_from: str = quantity(
        help="'frequency': element size from the highest frequency, order and accuracy",
        choices=("", "frequency"),
        default="",
    )
    geometry_order: int = quantity(
        help="1 straight, 2 curved elements where murmesh meshes; 0: 2 if a surface is curved", low=0, high=2, default=0
    )

    def validate(self) -> None:
        if self.unit is not None and self.unit not in UNITS:
            raise FieldError(f"mesh/unit '{self.unit}' is not known; expected one of {', '.join(UNITS)}")
        if self.size is not None and self.size_from:
            raise FieldError("the element size is said twice; give size or size_from, not both")


@record
class RegionEntry(Declared):
    """A volume group (name or glob) and what fills it."""

    name: str = quantity(help="name of the volume group, or a glob")
    medium: Medium = quantity(help="the fluid or porous material in it")
    damping: Damping = quantity(help="its losses, as they were measured", default=NoDamping())
    where: Rule | None = quantity(help="a box instead of a group", default=None)


@record
class SurfaceEntry(Declared):
    """A surface group (name, glob or rule) and its boundary kind."""

    name: str = quantity(help="name of the surface group, or a glob")
    boundary: Boundary = quantity(help="what the surface is")
    where: Rule | None = quantity(help="a geometric rule instead of a group", default=None)

    def validate(self) -> None:
        if self.where is not None and is_glob(self.name):
            raise FieldError(f"surface '{self.name}' has a rule, so it needs a plain name; write the glob in where.of")


@record
class LoadSet(Declared):
    """The load case "default", to which the loads named beside surfaces go."""

    spectrum: str = quantity(help="line spectrum or density", choices=("tones", "density"), default="density")
    bandwidth: float = quantity(help="bandwidth the amplitudes of a density hold in", unit="Hz", positive=True, default=1.0)
    combination: Combination = quantity(help="how the loads act together", default=Coherent())
    loads: tuple[Load, ...] = quantity(help="loads; a surface may be a glob", default=())


@record
class Job(Declared):
    """Regions, surfaces, loads, receivers and sweep by the names of groups; every method returns a changed copy."""

    title: str = quantity(help="title of the job", default="")
    mesh: MeshFile | None = quantity(help="the mesh", default=None)
    wrap: Wrap | None = quantity(help="air to put around the geometry before it is meshed", default=None)
    regions: tuple[RegionEntry, ...] = quantity(help="volumes", default=())
    surfaces: tuple[SurfaceEntry, ...] = quantity(help="surfaces", default=())
    default_boundary: str = quantity(
        help="'rigid': outer triangles named nowhere become the rigid surface 'unnamed_walls'; '': an error",
        choices=("", "rigid"), default="",
    )  # fmt: skip
    loads: LoadSet = quantity(help="the load case 'default'", default=LoadSet())
    load_cases: tuple[LoadCase, ...] = quantity(help="further operating states", default=())
    receivers: tuple[Receiver, ...] = quantity(help="microphones and ears", default=())
    sweep: Sweep | None = quantity(help="frequencies", default=None)
    catalogue: tuple[Treatment, ...] = quantity(help="treatments to choose from", default=())
    limits: Limits = quantity(help="what a choice of treatments must keep to", default=Limits())
    ranges: Ranges = quantity(help="what is not known exactly, for the spread of gains", default=Ranges())

    def validate(self) -> None:
        for what in ("regions", "surfaces", "receivers"):
            names = [item.name for item in getattr(self, what)]
            for name in names:
                if names.count(name) > 1:
                    raise FieldError(f"{what}: '{name}' is described twice; merge the two entries")

    # -- said in Python ------------------------------------------------------------------------------------------------

    def with_mesh(self, file: str, **options: Any) -> Job:
        """The mesh or geometry file; options of `MeshFile`."""
        return self.with_(mesh=MeshFile(file, **options))

    def with_wrap(self, gap: float, **options: Any) -> Job:
        """Air around the geometry; options of `Wrap`."""
        return self.with_(wrap=Wrap(gap, **options))

    def region(self, name: str, medium: Medium, damping: Damping | None = None, where: Rule | None = None) -> Job:
        """Fill the volume group `name` with a medium."""
        return self.with_(regions=(*self.regions, RegionEntry(name, medium, damping or NoDamping(), where)))

    def surface(
        self,
        name: str,
        boundary: Boundary,
        *,
        velocity: Motion | Spectrum | complex | None = None,
        acceleration: Motion | Spectrum | complex | None = None,
        pressure: Spectrum | complex | None = None,
        wave: Spectrum | complex | None = None,
        where: Rule | None = None,
    ) -> Job:
        """Give the surface group `name` a kind and, in the load case "default", a load (positive = into the air)."""
        job = self.with_(surfaces=(*self.surfaces, SurfaceEntry(name, boundary, where)))
        for given, measure in ((velocity, "velocity"), (acceleration, "acceleration")):
            if given is not None:
                job = job.load(SurfaceVelocity(name, as_motion(given, measure)))
        if pressure is not None:
            job = job.load(SurfacePressure(name, pressure))
        return job if wave is None else job.load(IncomingWave(name, wave))

    def load(self, *loads: Load) -> Job:
        """Add loads to the load case "default"."""
        return self.with_(loads=self.loads.with_(loads=(*self.loads.loads, *loads)))

    def source(self, label: str, position: Iterable[float], volume_velocity: complex | Spectrum) -> Job:
        """Add a monopole to the load case "default"."""
        return self.load(Monopole(label, _vector(position), volume_velocity))

    def with_loads(self, **options: Any) -> Job:
        """Say spectrum, bandwidth or combination of the load case "default"."""
        return self.with_(loads=self.loads.with_(**options))

    def load_case(self, load_case: LoadCase) -> Job:
        """Add an operating state of its own."""
        return self.with_(load_cases=(*self.load_cases, load_case))

    def receiver(self, name: str, position: Iterable[float], radius: float = 0.0, measured: Measured | None = None) -> Job:
        """Add a microphone or ear."""
        return self.with_(receivers=(*self.receivers, Receiver(name, _vector(position), radius, measured)))

    def with_sweep(
        self,
        start: float = 0.0,
        stop: float = 0.0,
        step: float = 0.0,
        *,
        extra: Iterable[float] = (),
        frequencies: Iterable[float] | None = None,
        **options: Any,
    ) -> Job:
        """The frequencies: start, stop and step with extra lines, or a list; options of `Sweep`."""
        for key in options.keys() & {"field_frequencies"}:
            options[key] = np.asarray(options[key], dtype=np.float64)
        if frequencies is None:
            return self.with_(sweep=Sweep.grid(start, stop, step, extra, **options))
        return self.with_(sweep=Sweep(np.asarray(tuple(frequencies), dtype=np.float64), **options))

    def treatment(self, treatment: Treatment) -> Job:
        """Add a treatment to the catalogue."""
        return self.with_(catalogue=(*self.catalogue, treatment))

    def with_limits(self, **options: Any) -> Job:
        """Say what a choice of treatments must keep to; options of `Limits`."""
        return self.with_(limits=self.limits.with_(**options))

    def with_ranges(self, **options: Any) -> Job:
        """Say what is not known exactly; options of `Ranges`."""
        return self.with_(ranges=self.ranges.with_(**options))

    # -- what follows from it ------------------------------------------------------------------------------------------

    @property
    def all_load_cases(self) -> tuple[LoadCase, ...]:
        """The load case "default", if it holds anything, and the others; surfaces may still be globs."""
        if not self.loads.loads:
            return self.load_cases
        own = self.loads
        first = LoadCase(DEFAULT_LOAD_CASE, own.loads, own.spectrum, own.bandwidth, own.combination)
        return (first, *self.load_cases)

    def require_sweep(self) -> Sweep:
        """The sweep; CaseError if the job has none."""
        if self.sweep is None:
            raise CaseError("the job has no sweep; give start, stop and step (or frequencies) under [sweep]")
        return self.sweep

    def element_size(self) -> float:
        """Element size [m] from the highest frequency, the slowest medium, the order and the accuracy of the sweep."""
        sweep = self.require_sweep()
        if not self.regions:
            raise CaseError("the element size needs the speed of sound; describe a region with its medium")
        top = sweep.frequencies[-1:]
        speed = min(abs(complex(entry.medium.c(top)[0])) for entry in self.regions)
        return element_size(float(top[0]), speed, sweep.order or 4, sweep.accuracy)

    def read_mesh(self, folder: str | Path = ".") -> TaggedMesh:
        """The mesh the job names, relative to `folder`; geometry without a stated size is meshed for the sweep."""
        if self.mesh is None:
            raise CaseError("the job names no mesh; give file = ... under [mesh]")
        path = Path(folder) / self.mesh.file
        size, unit, order = self.size_for(path), self.mesh.unit, self.mesh.geometry_order
        return read_mesh(path, size=size, unit=unit, order=order, wrap=self.wrap)

    def size_for(self, path: Path) -> float | None:
        """The element size [m] to mesh `path` with; None leaves it to the file."""
        stated = None if self.mesh is None else self.mesh.size
        by_frequency = self.mesh is not None and self.mesh.size_from
        if by_frequency or (path.suffix.lower() in CAD and stated is None):
            return self.element_size()
        return stated

    # -- as text -------------------------------------------------------------------------------------------------------

    @classmethod
    def from_toml(cls, path: str | Path) -> Job:
        """The job in a TOML file; errors name the file, the path inside it and the nearest known key."""
        from murmesh.plugin.job_text import read_toml

        return read_toml(Path(path))

    def to_toml(self, path: str | Path) -> None:
        """Write the job as a TOML file."""
        from murmesh.plugin.job_text import toml_text

        Path(path).write_text(toml_text(self), encoding="utf-8")

    @classmethod
    def from_json(cls, text: str) -> Job:
        """The job in one line of JSON, as it is stored in a gmsh model."""
        from murmesh.plugin.job_text import read_json

        return read_json(text)

    def to_json(self) -> str:
        """The job as one line of JSON."""
        from murmesh.plugin.job_text import json_text

        return json_text(self)


def as_motion(given: Motion | Spectrum | complex, measure: str = "velocity") -> Motion:
    """A motion as it is; a number or spectrum as a uniform motion, peak, positive into the air.

    Raises FieldError if a motion says that it is something else than `measure`.
    """
    if not isinstance(given, Motion):
        return Uniform(given, measure)
    if given.measure != measure:
        raise FieldError(f"a motion of measure '{given.measure}' was given as {measure}; use {given.measure} = ... for it")
    return given


def _vector(position: Iterable[float]) -> Vector:
    x, y, z = (float(value) for value in position)
    return x, y, z
