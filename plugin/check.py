"""The tag check: everything that can be known to be wrong, doubtful or worth knowing before a case is solved."""

from __future__ import annotations

from collections.abc import Callable, Iterable

from murmesh.plugin.findings import acoustics, laws, shape
from murmesh.plugin.findings.finding import Finding, as_json, error, ordered, render
from murmesh.plugin.findings.scene import Scene
from murmesh.plugin.job import Job
from murmesh.plugin.mesh_source import TaggedMesh
from murmesh.plugin.model import case_of
from murmesh.plugin.resolve import resolve
from murmesh.solver.case.model import Case
from murmesh.solver.errors import CaseError

LAWS = (laws.ranges, laws.passivity, laws.validity, laws.time_signs)
RULES: tuple[Callable[[Scene], Iterable[Finding]], ...] = (
    lambda scene: shape.size(scene.case.mesh.nodes),
    lambda scene: shape.elements(scene.case.mesh.nodes, scene.case.mesh.tets),
    lambda scene: shape.overlaps(scene.skin),
    shape.placement,
    shape.listing,
    shape.outside,
    shape.radiation,
    shape.separate_parts,
    acoustics.resolution,
    acoustics.losses,
    acoustics.unloaded,
    *LAWS,
    acoustics.ports,
    acoustics.scans,
)


def check(job: Job, mesh: TaggedMesh) -> tuple[Finding, ...]:
    """Findings of a job on its mesh, errors first; nothing is raised for what a finding can say."""
    resolved = resolve(job, mesh)
    found = [*shape.foreign_cells(mesh), *resolved.findings, *_loads(job)]
    if any(finding.severity == "error" for finding in found):
        found += [*shape.size(mesh.nodes), *shape.elements(mesh.nodes, mesh.tets), *shape.overlaps(resolved.skin)]
        return ordered(found)
    try:
        case = case_of(job, resolved)
    except CaseError as problem:
        return ordered([*found, _refused("case_refused", "job", problem)])
    return ordered([*found, *check_case(case)])


def check_case(case: Case) -> tuple[Finding, ...]:
    """Findings that need only a case, errors first: for cases written by others, and before every solution."""
    scene = Scene(case)
    return ordered(finding for rule in RULES for finding in rule(scene))


def check_catalogue(case: Case) -> tuple[Finding, ...]:
    """Findings about the laws of the catalogue, errors first: it may change after a case was checked and solved."""
    scene, names = Scene(case), {treatment.name for treatment in case.catalogue}
    return ordered(finding for rule in LAWS for finding in rule(scene) if finding.subject in names)


def _loads(job: Job) -> list[Finding]:
    """Loads that cannot act together, such as autospectra combined coherently."""
    try:
        _ = job.all_load_cases
    except CaseError as problem:
        code = "coherent_autospectra" if "without phase" in str(problem) else "loads_refused"
        return [_refused(code, "loads", problem)]
    return []


def _refused(code: str, subject: str, problem: CaseError) -> Finding:
    text, _, cure = str(problem).rpartition("; ")
    return error(code, subject, text or cure, cure)


__all__ = ["Finding", "as_json", "check", "check_case", "check_catalogue", "render"]
