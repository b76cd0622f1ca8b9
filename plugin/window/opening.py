"""A model or job opened in the current gmsh session: groups, mesh in metres, and the job that goes with it."""

from __future__ import annotations

import os
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from murmesh.plugin.cli.start import job_text as started
from murmesh.plugin.gmsh_session import CAD, current_gmsh, generate, group_name, open_model
from murmesh.plugin.job import Job, MeshFile
from murmesh.plugin.job_text import toml_text
from murmesh.plugin.mesh_source import BY_GMSH, UNITS, TaggedMesh, from_gmsh, require_unit
from murmesh.plugin.window.document import Document
from murmesh.plugin.window.state import State
from murmesh.plugin.wrapping import wrap_model
from murmesh.solver.errors import CaseError, FormatError


@dataclass(frozen=True, eq=False)
class Opened:
    """What is open: where the job is saved, the model's file, the mesh [m], the length [m] of one of its units, entities."""

    job_file: Path
    model: Path
    mesh: TaggedMesh
    scale: float
    entities: Mapping[str, tuple[int, ...]]
    regrouped: bool
    """The model had no surface group: every surface was given one, and saving writes a .msh that holds them."""

    @property
    def group_of(self) -> dict[int, str]:
        """The surface group of every entity."""
        return {tag: name for name, tags in self.entities.items() for tag in tags}


def open_files(model: str | Path, job: str | Path | None = None, unit: str | None = None) -> tuple[Opened, State]:
    """Open a model (.geo, .py, STEP, BREP, .msh) or a job file (.toml); gmsh must be initialised.

    Raises FormatError for what gmsh cannot open, CaseError where the unit must be stated.
    """
    path = Path(model)
    if not path.is_file():
        raise FormatError(f"there is no file '{path}'; check the path")
    job_file = Path(job) if job else path.with_suffix(".toml")
    document = _read(job_file) if job_file.is_file() else None
    if path.suffix == ".toml":
        path = _named_model(_read(path))
    elif document is not None:
        document = _naming(document, path)
    if document is not None and unit and document.value(("mesh", "unit")) is None:
        document = document.with_value(("mesh", "unit"), unit)
    opened = _opened(path, document, job_file, unit)
    saved = job_file.read_text(encoding="utf-8") if job_file.is_file() else ""
    document = document or _first(opened, unit)
    if opened.regrouped:
        document = _naming(document, path.with_suffix(".msh")).with_value(("mesh", "unit"), _unit(opened.scale))
    return opened, State(document, tuple(opened.entities), tuple(opened.mesh.tet_groups) or ("air",), saved=saved)


def _read(path: Path) -> Document:
    document = Document(path.read_text(encoding="utf-8"), path.parent)
    _ = document.tree
    return document


def _named_model(document: Document) -> Path:
    if not document.value(("mesh", "file")):
        raise CaseError("the job names no mesh, so there is nothing to open; give file = ... under [mesh]")
    return document.folder / str(document.value(("mesh", "file")))


def _naming(document: Document, model: Path) -> Document:
    """The document whose mesh is `model`."""
    held = document.value(("mesh", "file"))
    if held and (document.folder / str(held)).resolve() == model.resolve():
        return document
    return document.with_value(("mesh", "file"), os.path.relpath(model, document.folder))


def _opened(path: Path, document: Document | None, job_file: Path, unit: str | None) -> Opened:
    if path.suffix.lower() not in BY_GMSH:
        raise FormatError(f"gmsh does not open '{path.name}'; expected one of {', '.join(sorted(BY_GMSH))}, or a job (.toml)")
    mesh_file, size, around = MeshFile(path.name, unit=unit), None, None
    if document is not None and document.value(("mesh",)):
        job = document.job
        mesh_file, size, around = job.mesh or mesh_file, job.size_for(path), job.wrap
    factor = open_model(path, size, mesh_file.unit, UNITS)
    if mesh_file.unit is None:
        require_unit(path, factor)
    gmsh = current_gmsh()
    if around is not None:
        wrap_model(around, factor)
    regrouped = not gmsh.model.getPhysicalGroups(2) and bool(gmsh.model.getEntities(2))
    if regrouped:
        _group(gmsh)
    if size is None and path.suffix.lower() in CAD:
        size = Job().with_sweep(frequencies=[300.0]).region("air", _air()).element_size()
    generate(path, None if size is None else size / factor, mesh_file.geometry_order)
    return Opened(job_file, path, from_gmsh(str(path)).scaled(factor), factor, _entities(gmsh), regrouped)


def _air() -> Any:
    from murmesh.solver.case.medium import Air

    return Air()


def _group(gmsh: Any) -> None:
    """A group for every surface, and one for all volumes where there is none."""
    for _, tag in gmsh.model.getEntities(2):
        gmsh.model.addPhysicalGroup(2, [tag], tag, name=f"surface_{tag}")
    volumes = [tag for _, tag in gmsh.model.getEntities(3)]
    if volumes and not gmsh.model.getPhysicalGroups(3):
        gmsh.model.addPhysicalGroup(3, volumes, name="air")


def _unit(scale: float) -> str:
    """The name of a length of `scale` metres."""
    for name, length in UNITS.items():
        if abs(length - scale) < 1e-9 * scale:
            return name
    raise CaseError(f"one unit of the model is {scale:g} m, which has no name; tag its surfaces in gmsh and state their unit")


def _entities(gmsh: Any) -> dict[str, tuple[int, ...]]:
    groups = gmsh.model.getPhysicalGroups(2)
    return {
        group_name(gmsh, dim, tag): tuple(map(int, gmsh.model.getEntitiesForPhysicalGroup(dim, tag))) for dim, tag in groups
    }


def _first(opened: Opened, unit: str | None) -> Document:
    """The job that the model carries, or one to begin with."""
    folder, file = opened.job_file.parent, os.path.relpath(opened.model, opened.job_file.parent)
    if opened.mesh.job:
        job = Job.from_json(opened.mesh.job)
        mesh = (job.mesh or MeshFile(file)).with_(file=file)
        return Document(toml_text(job.with_(mesh=mesh)), folder)
    return Document(started(opened.mesh, file, unit), folder)
