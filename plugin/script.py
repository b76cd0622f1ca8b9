"""murmesh from a gmsh script, without a window:

    from murmesh.plugin import script
    script.wrap(gap=0.2, ground=0.0)                # before the model is meshed: air around it, up to a dome
    result = script.solved("booth.toml")            # a Job, or a job file, on the current gmsh model
    script.show(result, 120.0, receiver="ear")      # the views of `murmesh window` in the current gmsh session

`script.write(job, "booth.h5")` writes the neutral case instead, to be solved elsewhere.
"""

from __future__ import annotations

from pathlib import Path

from murmesh.plugin.gmsh_views import Views
from murmesh.plugin.job import Job
from murmesh.plugin.mesh_source import from_gmsh
from murmesh.plugin.model import build_case, store_job
from murmesh.plugin.wrapping import wrap
from murmesh.solver.case.hdf5 import write_case
from murmesh.solver.case.model import Case
from murmesh.solver.result import Result, read_result
from murmesh.solver.sweep import solve

__all__ = ["case_of", "show", "solved", "wrap", "write"]


def case_of(job: Job | str | Path, scale: float = 1.0) -> Case:
    """The case of `job` on the current gmsh model, one unit of which is `scale` metres; the model carries the job then.

    Raises MeshError without a meshed model, CaseError where job and groups do not fit.
    """
    job = job if isinstance(job, Job) else Job.from_toml(job)
    case = build_case(job, from_gmsh().scaled(scale))
    store_job(job)
    return case


def write(job: Job | str | Path, path: str | Path, scale: float = 1.0) -> Path:
    """Write the neutral case of `job` on the current gmsh model."""
    write_case(case_of(job, scale), path)
    return Path(path)


def solved(job: Job | str | Path, scale: float = 1.0) -> Result:
    """The result of `job` on the current gmsh model."""
    return solve(case_of(job, scale))


def show(
    result: Result | str | Path, frequency: float | None = None, *, receiver: str = "", load_case: str = "", scale: float = 1.0
) -> dict[str, int]:
    """Level on surfaces and on a cut plane, phase and contributions at a line; the tags of the views by name.

    None takes the loudest line. `gmsh.view.write(tag, "levels.pos")` writes one.
    """
    views = Views(result if isinstance(result, Result) else read_result(result), scale)
    return {
        "levels": views.levels(frequency, load_case),
        "cut": views.cut(frequency, load_case),
        "phase": views.phase(frequency, load_case),
        "panels": views.panels(frequency, receiver, load_case),
    }
