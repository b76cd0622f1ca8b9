"""gmsh groups, a tagged mesh and a job become a case; a job is stored in a gmsh model and found there again."""

from __future__ import annotations

import fnmatch
from collections.abc import Iterable

import numpy as np

from murmesh.plugin.gmsh_session import current_gmsh
from murmesh.plugin.job import Job, is_glob
from murmesh.plugin.mesh_source import JOB_ATTRIBUTE, TaggedMesh, from_gmsh
from murmesh.plugin.resolve import Resolved, resolve
from murmesh.solver.case.boundary import Boundary
from murmesh.solver.case.load import IncomingWave, Load, LoadCase, SurfacePressure, SurfaceVelocity
from murmesh.solver.case.model import Case, Mesh, Surface
from murmesh.solver.errors import CaseError, nearest

_SHOWN = 5


def build_case(job: Job, mesh: TaggedMesh) -> Case:
    """The case that `job` means on `mesh`: names resolved, triangles counted once, unused nodes dropped.

    Raises CaseError with every error of the tags and its cure.
    """
    return case_of(job, resolve(job, mesh))


def case_of(job: Job, resolved: Resolved) -> Case:
    """The case of a job whose names are already resolved."""
    _require_sound(resolved)
    named = resolved.triangle_surface >= 0
    triangles, skin = resolved.triangles[named], resolved.skin
    used = np.unique(np.concatenate([skin.tets.ravel(), triangles.ravel()]))
    number = np.zeros(len(skin.nodes), dtype=np.int64)
    number[used] = np.arange(len(used))
    mesh = Mesh(skin.nodes[used], number[skin.tets], resolved.tet_region, number[triangles], resolved.triangle_surface[named])
    loads = tuple(_expanded(load_case, resolved.surfaces) for load_case in job.all_load_cases)
    return Case(
        mesh,
        resolved.regions,
        resolved.surfaces,
        job.require_sweep(),
        loads,
        job.receivers,
        job.catalogue,
        job.limits,
        job.ranges,
        title=job.title,
    )


def case_from_gmsh(job: Job) -> Case:
    """The case of `job` on the current gmsh model, which must be meshed."""
    return build_case(job, from_gmsh())


def store_job(job: Job) -> None:
    """Store `job` in the current gmsh model; a .msh written afterwards carries it (other formats lose it)."""
    current_gmsh().model.setAttribute(JOB_ATTRIBUTE, [job.to_json()])


def stored_job() -> Job | None:
    """The job that the current gmsh model carries, or None."""
    gmsh = current_gmsh()
    if JOB_ATTRIBUTE not in gmsh.model.getAttributeNames():
        return None
    return Job.from_json("".join(gmsh.model.getAttribute(JOB_ATTRIBUTE)))


def _require_sound(resolved: Resolved) -> None:
    errors = [finding for finding in resolved.findings if finding.severity == "error"]
    if errors:
        shown = "\n".join(f"  {finding.message}; {finding.cure}" for finding in errors[:_SHOWN])
        more = f"\n  and {len(errors) - _SHOWN} more" if len(errors) > _SHOWN else ""
        raise CaseError(f"the job does not fit the mesh:\n{shown}{more}")


def _expanded(load_case: LoadCase, surfaces: tuple[Surface, ...]) -> LoadCase:
    """The load case with every glob replaced by the surfaces it means; a load on an exact name wins."""
    exact = {load.acts_on for load in load_case.loads if load.acts_on and not is_glob(load.acts_on)}
    loads: list[Load] = []
    owner: dict[str, str] = {}
    for load in load_case.loads:
        if not is_glob(load.acts_on):
            loads.append(load)
            continue
        for name in _able(load, surfaces, load_case.name):
            if name in exact:
                continue
            if name in owner:
                raise CaseError(
                    f"load case '{load_case.name}': '{name}' is loaded through two globs, '{owner[name]}' and "
                    f"'{load.acts_on}'; write a load for '{name}' itself, or make one glob narrower"
                )
            owner[name] = load.acts_on
            loads.append(load.with_(surface=name))
    return load_case.with_(loads=tuple(loads))


def _able(load: Load, surfaces: Iterable[Surface], where: str) -> list[str]:
    """Surfaces that match the load's glob and can carry it."""
    matching = [surface for surface in surfaces if fnmatch.fnmatchcase(surface.name, load.acts_on)]
    able = [surface.name for surface in matching if _carries(surface.boundary, load)]
    if not able:
        raise CaseError(
            f"load case '{where}': no surface that can carry a {load.kind_name} matches '{load.acts_on}'; "
            f"{nearest(load.acts_on, [surface.name for surface in surfaces])}"
        )
    return able


def _carries(boundary: Boundary, load: Load) -> bool:
    return {
        SurfaceVelocity: boundary.moves,
        SurfacePressure: boundary.fixes_pressure,
        IncomingWave: boundary.takes_wave,
    }[type(load)]
