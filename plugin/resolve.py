"""Names, globs and rules of a job against the groups of a mesh: a region per tetrahedron, a surface per triangle.

Precedence: a rule wins over an exact name, an exact name over a glob; among equals the first entry of the job.
A triangle in two groups is counted once. Nothing is raised here: what is wrong comes back as findings.
"""

from __future__ import annotations

import fnmatch
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import cast

import numpy as np
import numpy.typing as npt

from murmesh.plugin.findings.finding import Finding, error, note, warning
from murmesh.plugin.job import Job, RegionEntry, Rule, SurfaceEntry, is_glob
from murmesh.plugin.mesh_source import TaggedMesh, cell_keys
from murmesh.plugin.skin import Skin
from murmesh.solver.case.boundary import Rigid
from murmesh.solver.case.model import NO_SURFACE, Region, Surface
from murmesh.solver.errors import nearest

Ints = npt.NDArray[np.int64]
UNNAMED = "unnamed_walls"
_DIMENSIONS = ("points", "curves", "surfaces", "volumes")
_SLACK = 1e-9
Entry = RegionEntry | SurfaceEntry


@dataclass(frozen=True, eq=False)
class Resolved:
    """What the job means on this mesh; `triangles` are the mesh's own and the outer faces it does not list."""

    regions: tuple[Region, ...]
    tet_region: Ints
    surfaces: tuple[Surface, ...]
    triangles: Ints
    triangle_surface: Ints
    skin: Skin
    findings: tuple[Finding, ...]


@dataclass(frozen=True, eq=False)
class _Claim:
    """Cells that an entry takes under a name; rank 0 rule, 1 exact name, 2 glob."""

    name: str
    entry: Entry
    cells: Ints
    rank: int


def resolve(job: Job, mesh: TaggedMesh) -> Resolved:
    """Regions and surfaces of `job` on `mesh`, and what is wrong with their names."""
    found: list[Finding] = []
    skin = Skin(mesh.nodes, mesh.tets)
    regions, tet_region = _regions(job, mesh, found)
    triangles = _with_outer_faces(mesh, skin)
    surfaces, index = _surfaces(job, mesh, skin, triangles, found)
    found += _named_nowhere(job, mesh)
    surfaces, index = _rest(job, skin, triangles, surfaces, index, found)
    return Resolved(regions, tet_region, surfaces, triangles, index, skin, tuple(found))


def _regions(job: Job, mesh: TaggedMesh, found: list[Finding]) -> tuple[tuple[Region, ...], Ints]:
    index = np.full(len(mesh.tets), -1, dtype=np.int64)
    if not len(mesh.tets):
        cure = "mesh the volume (dimension 3), and give it a physical group so that it is written"
        found.append(error("no_tetrahedra", mesh.source, "the mesh holds no tetrahedra", cure))
        return (), index
    if len(job.regions) == 1 and not mesh.tet_groups and job.regions[0].where is None:
        only = job.regions[0]
        text = f"the mesh has no volume group, so all {len(mesh.tets)} tetrahedra are the region '{only.name}'"
        found.append(note("region_without_group", only.name, text))
        return (Region(only.name, only.medium, only.damping),), np.zeros(len(mesh.tets), dtype=np.int64)
    centroids = mesh.nodes[mesh.tets[:, :4]].mean(axis=1)

    def by_rule(rule: Rule) -> Ints:
        return np.flatnonzero(_inside(rule, centroids))

    claims = _claims(job.regions, mesh.tet_groups, mesh, 3, by_rule, found)
    kept = _assign(claims, index, "tetrahedra", found)
    _report_left(mesh, index, found)
    entries = [(claim.name, cast(RegionEntry, claim.entry)) for claim in kept]
    return tuple(Region(name, entry.medium, entry.damping) for name, entry in entries), index


def _report_left(mesh: TaggedMesh, index: Ints, found: list[Finding]) -> None:
    left = int(np.sum(index < 0))
    if left:
        text = f"{left} of {len(index)} tetrahedra belong to no region of the job"
        cure = f"describe their group under [regions], or leave them out of the mesh. {nearest('', mesh.tet_groups)}"
        found.append(error("tetrahedra_without_region", mesh.source, text, cure))


def _with_outer_faces(mesh: TaggedMesh, skin: Skin) -> Ints:
    """The mesh's triangles, and the outer faces that it does not list."""
    faces = skin.corners(skin.outer)
    listed = skin.owners(mesh.triangles)
    width = min(faces.shape[1], mesh.triangles.shape[1]) if len(mesh.triangles) else faces.shape[1]
    if not len(mesh.triangles):
        return faces
    known = cell_keys(mesh.triangles[listed[:, 0] >= 0][:, :3], len(mesh.nodes))
    missing = ~np.isin(cell_keys(faces[:, :3], len(mesh.nodes)), known)
    return np.concatenate([mesh.triangles[:, :width], faces[missing][:, :width]])


def _surfaces(
    job: Job, mesh: TaggedMesh, skin: Skin, triangles: Ints, found: list[Finding]
) -> tuple[tuple[Surface, ...], Ints]:
    index = np.full(len(triangles), NO_SURFACE, dtype=np.int64)
    owners = skin.owners(triangles)
    outer = (owners[:, 0] >= 0) & (owners[:, 1] < 0)
    centroids, normals = skin.centroids(triangles), skin.outward(triangles, owners)

    def by_rule(rule: Rule) -> Ints:
        pool = outer
        if rule.of:
            pool = np.zeros(len(triangles), dtype=bool)
            for name, cells in mesh.triangle_groups.items():
                if fnmatch.fnmatchcase(name, rule.of):
                    pool[cells] = True
        chosen = pool & _inside(rule, centroids)
        if rule.facing is not None:
            towards = np.asarray(rule.facing) / np.linalg.norm(rule.facing)
            cosine = normals @ towards
            chosen &= np.where(outer, cosine, np.abs(cosine)) >= np.cos(np.deg2rad(rule.within_deg)) - _SLACK
        return np.flatnonzero(chosen)

    claims = _claims(job.surfaces, mesh.triangle_groups, mesh, 2, by_rule, found)
    kept = _assign(claims, index, "triangles", found)
    _report_loose(kept, index, owners, found)
    return tuple(Surface(claim.name, cast(SurfaceEntry, claim.entry).boundary) for claim in kept), index


def _inside(rule: Rule, points: npt.NDArray[np.float64]) -> npt.NDArray[np.bool_]:
    if rule.inside is None:
        return np.ones(len(points), dtype=bool)
    low, high = np.sort(np.asarray(rule.inside), axis=0)
    slack = _SLACK * max(float(np.abs(points).max(initial=1.0)), 1.0)
    return np.asarray(np.all((points >= low - slack) & (points <= high + slack), axis=1))


def _claims(
    entries: Sequence[Entry],
    groups: Mapping[str, Ints],
    mesh: TaggedMesh,
    dim: int,
    by_rule: Callable[[Rule], Ints],
    found: list[Finding],
) -> list[_Claim]:
    """What every entry asks for, in order of precedence."""
    exact = {entry.name for entry in entries if not is_glob(entry.name)}
    taken: dict[str, str] = {}
    claims: list[_Claim] = []
    for entry in entries:
        if entry.where is not None:
            cells = by_rule(entry.where)
            if not len(cells):
                found.append(_empty_rule(entry, dim))
            claims.append(_Claim(entry.name, entry, cells, 0))
        elif is_glob(entry.name):
            claims += _glob_claims(entry, groups, mesh, dim, exact, taken, found)
        elif len(groups.get(entry.name, ())):
            claims.append(_Claim(entry.name, entry, groups[entry.name], 1))
        else:
            found.append(_lost(entry.name, groups, mesh, dim))
    return sorted(claims, key=lambda claim: claim.rank)


def _glob_claims(
    entry: Entry, groups: Mapping[str, Ints], mesh: TaggedMesh, dim: int, exact: set[str], taken: dict[str, str],
    found: list[Finding],
) -> list[_Claim]:  # fmt: skip
    names = [name for name in groups if fnmatch.fnmatchcase(name, entry.name)]
    if not names:
        found.append(_lost(entry.name, groups, mesh, dim))
    claims = []
    for name in names:
        if name in exact or not len(groups[name]):
            continue
        if name in taken:
            text = f"the group '{name}' is matched by two globs, '{taken[name]}' and '{entry.name}'"
            cure = f"write an entry for '{name}' itself (an exact name wins), or make one glob narrower"
            found.append(error("two_globs", name, text, cure))
            continue
        taken[name] = entry.name
        claims.append(_Claim(name, entry, groups[name], 2))
    return claims


def _empty_rule(entry: Entry, dim: int) -> Finding:
    text = f"the rule of '{entry.name}' selects no {'triangle' if dim == 2 else 'tetrahedron'}"
    cure = "check its box (metres), its direction (normal out of the air), and the groups it names with `of`"
    return error("rule_selects_nothing", entry.name, text, cure)


def _lost(name: str, groups: Mapping[str, Ints], mesh: TaggedMesh, dim: int) -> Finding:
    """Why a name finds nothing: a group of another dimension, one without cells, or none at all."""
    elsewhere = {**mesh.other_groups, **dict.fromkeys(mesh.triangle_groups, 2), **dict.fromkeys(mesh.tet_groups, 3)}
    word = "region" if dim == 3 else "surface"
    if name in groups:
        text = f"the group '{name}' is in the model, but holds no {'tetrahedra' if dim == 3 else 'triangles'}"
        return error(f"{word}_not_meshed", name, text, f"mesh it (dimension {dim}), or take it out of the job")
    if name in elsewhere:
        text = f"'{name}' is described as a {word}, but the mesh has it as a group of {_DIMENSIONS[elsewhere[name]]}"
        cure = f"make it a group of {_DIMENSIONS[dim]}, or describe it as what it is"
        return error("wrong_dimension", name, text, cure)
    text = f"the job names the {word} '{name}', but the mesh has no such group of {_DIMENSIONS[dim]}"
    cure = f"boolean operations drop groups: tag it after them, or select it by a rule. {nearest(name, groups)}"
    return error("group_lost", name, text, cure)


def _assign(claims: list[_Claim], index: Ints, what: str, found: list[Finding]) -> list[_Claim]:
    """Give every cell to the first claim; claims that end with nothing are dropped."""
    kept: list[_Claim] = []
    for claim in claims:
        free = claim.cells[index[claim.cells] < 0]
        if len(free) < len(claim.cells):
            held = index[claim.cells]
            for number in np.unique(held[held >= 0]):
                found.append(_shared(kept[number], claim, int(np.sum(held == number)), what, not len(free)))
        if len(free):
            index[free] = len(kept)
            kept.append(claim)
    return kept


def _shared(winner: _Claim, loser: _Claim, count: int, what: str, all_gone: bool) -> Finding:
    tail = f"; '{loser.name}' keeps none" if all_gone else ""
    text = f"{count} {what} are in '{winner.name}' and in '{loser.name}'; counted once, for '{winner.name}'{tail}"
    if winner.rank == 0 and loser.rank > 0 and not all_gone:
        return note("carved_by_rule", loser.name, text)
    cure = f"take them out of one of the two; the entry that comes first in the job wins, now '{winner.name}'"
    code = "triangles_in_two_groups" if what == "triangles" else "tetrahedra_in_two_groups"
    return (error if all_gone else warning)(code, loser.name, text, cure)


def _report_loose(kept: list[_Claim], index: Ints, owners: Ints, found: list[Finding]) -> None:
    loose = owners[:, 0] < 0
    for number, claim in enumerate(kept):
        count, whole = int(np.sum(loose & (index == number))), int(np.sum(index == number))
        if count:
            text = f"{count} of its {whole} triangles are a face of no tetrahedron"
            cure = (
                "the surface and the volume do not share their mesh: fragment them into one geometry before meshing, "
                "and give the volume a group"
            )
            found.append(error("triangle_on_no_tetrahedron", claim.name, text, cure))


def _named_nowhere(job: Job, mesh: TaggedMesh) -> list[Finding]:
    found = []
    entries: Sequence[Entry]
    rules = [entry.where.of for entry in job.surfaces if entry.where is not None and entry.where.of]
    pairs = ((mesh.triangle_groups, job.surfaces, "surface"), (mesh.tet_groups, job.regions, "region"))
    for groups, entries, word in pairs:
        patterns = [entry.name for entry in entries] + rules
        lost = [n for n in groups if not any(fnmatch.fnmatchcase(n, p) or n == p for p in patterns)]
        if lost:
            names = ", ".join(f"'{name}'" for name in lost)
            text = f"{len(lost)} {word} group{'s' * (len(lost) > 1)} of the mesh named nowhere in the job: {names}"
            cure = f"describe them under [{word}s], or drop the groups. {nearest(lost[0], [e.name for e in entries])}"
            subject = lost[0] if len(lost) == 1 else f"{len(lost)} groups"
            found.append(warning("group_named_nowhere", subject, text, cure))
    return found


def _rest(
    job: Job, skin: Skin, triangles: Ints, surfaces: tuple[Surface, ...], index: Ints, found: list[Finding]
) -> tuple[tuple[Surface, ...], Ints]:
    """Outer triangles that no entry names: rigid if the job says so, otherwise an error."""
    owners = skin.owners(triangles)
    left = np.flatnonzero((index < 0) & (owners[:, 0] >= 0) & (owners[:, 1] < 0))
    if not len(left):
        return surfaces, index
    areas = skin.areas(triangles[left])
    middle = areas @ skin.centroids(triangles[left]) / max(float(areas.sum()), 1e-300)
    share = areas.sum() / max(float(skin.areas(skin.corners(skin.outer)).sum()), 1e-300)
    text = (
        f"{len(left)} outer triangles, {areas.sum():.3g} m2 ({share:.0%} of the outer surface) about "
        f"({middle[0]:.3g}, {middle[1]:.3g}, {middle[2]:.3g}) m, have no kind"
    )
    if job.default_boundary != "rigid":
        cure = 'give them a kind (a group, a glob or a rule), or say default_boundary = "rigid" at the top of the job'
        found.append(error("surface_without_kind", mesh_part(middle), text, cure))
        return surfaces, index
    found.append(note("default_boundary", UNNAMED, f"{text} of their own and become the rigid surface '{UNNAMED}'"))
    filled = index.copy()
    filled[left] = len(surfaces)
    return (*surfaces, Surface(UNNAMED, Rigid())), filled


def mesh_part(middle: npt.NDArray[np.float64]) -> str:
    """A place in words."""
    return f"near ({middle[0]:.3g}, {middle[1]:.3g}, {middle[2]:.3g}) m"
