"""From whatever the user has to a case: a case file, a job file beside a model, or a model that carries its job."""

from __future__ import annotations

import argparse
from pathlib import Path

from murmesh.plugin.job import Job
from murmesh.plugin.mesh_source import TaggedMesh, read_mesh
from murmesh.plugin.model import build_case
from murmesh.solver.case.hdf5 import read_case
from murmesh.solver.case.model import Case
from murmesh.solver.errors import FormatError


def load_job(path: str | Path) -> tuple[Job, TaggedMesh]:
    """The job and the tagged mesh behind a job file (.toml) or a .msh that carries its job."""
    path = Path(path)
    if path.suffix == ".toml":
        job = Job.from_toml(path)
        return job, job.read_mesh(path.parent)
    mesh = read_mesh(path)
    if not mesh.job:
        raise FormatError(f"'{path}' carries no job; write a job file (.toml) that names it, or store one from a gmsh script")
    return Job.from_json(mesh.job), mesh


def load_case_file(path: str | Path) -> Case:
    """The case behind a case file, a job file or a model that carries its job."""
    if Path(path).suffix in (".h5", ".hdf5"):
        return read_case(path)
    return build_case(*load_job(path))


def model_arguments(parser: argparse.ArgumentParser) -> None:
    """The argument shared by subcommands that start from a model."""
    parser.add_argument("model", help="job file (.toml), case file (.h5), or a .msh that carries its job")
