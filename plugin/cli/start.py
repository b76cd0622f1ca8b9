"""murmesh start: a job file for a model, with every group in it, to be filled in."""

from __future__ import annotations

import argparse
import os
from pathlib import Path

import numpy as np

from murmesh.plugin.cli.command import DONE, Command, answer, register, say
from murmesh.plugin.files import written
from murmesh.plugin.job_text import HEADER
from murmesh.plugin.mesh_source import UNITS, TaggedMesh, read_mesh
from murmesh.solver.errors import CaseError


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("model", help="gmsh script or .geo, STEP, BREP, .msh, or a mesh with named sets")
    parser.add_argument("job", nargs="?", help="job file to write (default: MODEL.toml)")
    parser.add_argument("--unit", choices=tuple(UNITS), help="unit of the coordinates (default: metres, or the file's own)")


def run(args: argparse.Namespace) -> int:
    model = Path(args.model)
    target = Path(args.job) if args.job else model.with_suffix(".toml")
    if target.exists():
        raise CaseError(f"'{target}' exists already; name another job file, or remove it")
    mesh = read_mesh(model, unit=args.unit)
    with written(target) as scratch:
        scratch.write_text(job_text(mesh, os.path.relpath(model, target.parent), args.unit), encoding="utf-8")
    say(f"{len(mesh.tet_groups)} volume groups, {len(mesh.triangle_groups)} surface groups, extent {mesh.extent:.3g} m")
    say(f"now give the surfaces their kinds (murmesh kinds lists them), then: murmesh check {target}")
    answer(str(target))
    return DONE


def job_text(mesh: TaggedMesh, file: str, unit: str | None) -> str:
    """A job that solves as it stands: air, hard walls that vibrate nowhere, a source, and a receiver to move."""
    parts = [HEADER, f'title = "{Path(file).stem}"']
    if not mesh.triangle_groups:
        # a key of the job itself: it must stand before the first table
        parts += ['default_boundary = "rigid"   # no surface group found: say where surfaces lie, see the README']
    parts += ["", "[mesh]", f'file = "{file}"', *([f'unit = "{unit}"'] if unit else []), ""]
    for name in list(mesh.tet_groups) or ["all"]:
        parts += [f'[regions."{name}"]', 'medium = { kind = "air", temperature = 20.0 }']
        parts += ['damping = { kind = "loss_factor", value = 0.02 }   # a guess: state what was measured', ""]
    for name in mesh.triangle_groups:
        parts += [f'[surfaces."{name}"]', 'kind = "rigid"   # vibrating, impedance, port ...: murmesh kinds', ""]
    source, ear = _inner_points(mesh)
    monopole = f'kind = "monopole", label = "source", position = {source}, volume_velocity = 1e-4'
    parts += [
        "[loads]",
        f"loads = [{{ {monopole} }}]",
        "",
        "[[receivers]]",
        'name = "ear"',
        f"position = {ear}",
        "radius = 0.0",
        "",
    ]
    parts += ["[sweep]", "start = 50.0", "stop = 300.0", "step = 5.0"]
    parts += ["field_frequencies = [100.0, 200.0]   # lines kept for maps", ""]
    return "\n".join(parts)


def _inner_points(mesh: TaggedMesh) -> tuple[list[float], list[float]]:
    """Two points inside the fluid, far from each other: centres of the elements nearest to a quarter and to the middle."""
    centres = mesh.nodes[mesh.tets[:, :4]].mean(axis=1)
    low, high = centres.min(axis=0), centres.max(axis=0)
    found = []
    for share in (0.25, 0.5):
        nearest = np.argmin(np.linalg.norm(centres - (low + share * (high - low)), axis=1))
        found.append([round(float(x), 4) for x in centres[nearest]])
    return found[0], found[1]


register(
    Command(
        "start",
        "Write a job file for a model: every group is in it, ready to be given its kind.",
        "  murmesh start booth.step booth.toml --unit mm",
        arguments,
        run,
    )
)
