"""Findings about the acoustics of a case: resolution, losses, loads, ports and scans."""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np
import numpy.typing as npt

from murmesh.plugin.findings.finding import Finding, error, note, warning
from murmesh.plugin.findings.scene import Scene
from murmesh.plugin.mesh_source import element_size
from murmesh.solver.case.boundary import Adjacent, Boundary, Sheet
from murmesh.solver.case.load import SurfaceVelocity
from murmesh.solver.errors import CaseError, MurmeshError
from murmesh.solver.orders import elements_kh, expected_errors, orders_text
from murmesh.solver.scan import interpolation
from murmesh.solver.space import Space, discretise
from murmesh.solver.transmission import port_shape

Floats = npt.NDArray[np.float64]
UNCOVERED = 0.01
"""Share of a scanned surface without a scan point near it that is worth a warning (common practice, no source)."""


def resolution(scene: Scene) -> Iterator[Finding]:
    """Elements per wavelength, orders and the a-priori error at the highest frequency, per region."""
    for index, region in enumerate(scene.case.regions):
        if not np.any(scene.case.mesh.tet_region == index):
            cure = "mesh it and give it a volume group, or take it out of the case"
            yield error("region_not_meshed", region.name, "the region has no tetrahedra", cure)
    try:
        space = discretise(scene.case)
        expected = expected_errors(scene.case, space.topology, space.walls, space.dofs.orders)
    except MurmeshError:
        return  # said by the findings about the mesh and the laws
    for index in np.unique(scene.case.mesh.tet_region).tolist():
        yield _resolution_of(scene, space, index, float(expected[index]))


def _resolution_of(scene: Scene, space: Space, index: int, expected: float) -> Finding:
    region, sweep, inside = scene.case.regions[index], scene.case.sweep, scene.case.mesh.tet_region == index
    top, coarse = float(scene.frequencies[-1]), float(np.quantile(elements_kh(scene.case)[inside], 0.95))
    orders = space.dofs.orders[inside]
    text = f"{2 * np.pi / coarse:.2g} elements per wavelength at {top:g} Hz, {orders_text(orders)}: a-priori error "
    text += f"{expected:.2g} dB ({space.dofs.n_dofs:,} unknowns in all)"
    if expected <= sweep.accuracy * (1 + 1e-9):
        return note("elements_per_wavelength", region.name, text)
    speed = abs(complex(region.medium.c(scene.frequencies[-1:])[0]))
    size = element_size(top, speed, int(orders.max()), sweep.accuracy)
    cure = f"use elements of {size:.2g} m or less, a higher order, or a lower highest frequency"
    return warning("elements_per_wavelength", region.name, f"{text}, wanted {sweep.accuracy:g} dB", cure)


def losses(scene: Scene) -> Iterator[Finding]:
    """A model without any stated loss, or hard walls without any."""
    stated = {index: _region_loses(scene, index) for index in range(len(scene.case.regions))}
    absorbing = any(_absorbs(surface.boundary, scene, fluid) for surface, _, fluid in scene.touching())
    cure = (
        "state the losses as they are measured: reverberation_time, loss_factor, wall_absorption or air_absorption "
        "under damping of the region; doubling the residual damping of 'hard' walls moves levels by 2 to 3 dB(A)"
    )
    if not absorbing and not any(stated.values()):
        text = "NOTHING IN THIS MODEL ABSORBS SOUND: rigid walls without any stated damping, unbounded peaks"
        yield warning("no_damping", "whole model", text, cure)
        return
    for index, region in enumerate(scene.case.regions):
        if not stated[index] and _has_hard_walls(scene, index):
            text = "hard walls without any stated damping: only other surfaces or regions absorb"
            yield warning("hard_walls_without_damping", region.name, text, cure)


def _region_loses(scene: Scene, index: int) -> bool:
    region, f = scene.case.regions[index], scene.frequencies
    try:
        eta = region.damping.loss_factor(f, region.medium)
        walls = region.damping.hard_wall_admittance(f, region.medium.reference)
        return bool(np.any(eta > 0) or np.any(walls.real > 0) or np.any(region.medium.c(f).imag > 0))
    except CaseError:
        return True


def _absorbs(boundary: Boundary, scene: Scene, fluid: Adjacent) -> bool:
    try:
        parts = [side.admittance(scene.frequencies, fluid) for side in boundary.sides]
        parts.append(boundary.transfer_admittance(scene.frequencies, fluid))
    except CaseError:
        return True
    return any(part is not None and np.any(part.real > 0) for part in parts)


def _has_hard_walls(scene: Scene, region: int) -> bool:
    return any(
        any(side.hard for side in surface.boundary.sides) and region in scene.regions_of(index)
        for index, surface in enumerate(scene.case.surfaces)
    )


def unloaded(scene: Scene) -> Iterator[Finding]:
    """Nothing drives the air, or a vibrating surface stands still."""
    if not scene.case.load_cases:
        cure = "give a surface a velocity, or add a source; modes need no load"
        yield warning("no_load", "whole model", "no load case: nothing drives the air", cure)
        return
    driven = {load.acts_on for _, load in scene.loads()}
    for surface in scene.case.surfaces:
        if surface.boundary.moves and not isinstance(surface.boundary, Sheet) and surface.name not in driven:
            text = f"the surface is of kind '{surface.boundary.kind_name}', but no load case gives it a velocity"
            cure = "give it a velocity, or make it rigid or impedance"
            yield warning("vibrating_without_load", surface.name, text, cure)


def ports(scene: Scene) -> Iterator[Finding]:
    """Ports above the first cut-on of their duct, or not plane."""
    top = float(scene.frequencies[-1])
    for index, surface in enumerate(scene.case.surfaces):
        rows = scene.rows(index)
        if not surface.boundary.takes_wave or not len(rows):
            continue
        triangles = scene.case.mesh.triangles[rows]
        if not _plane(scene, triangles):
            text = "the port is not plane, but its wave is"
            yield warning("port_not_plane", surface.name, text, "cut the duct off by a plane across its axis")
        area = float(scene.skin.areas(triangles).sum())
        words, factor, extent = port_shape(scene.case.mesh.nodes[np.unique(triangles[:, :3])], area)
        media = [scene.case.regions[region].medium for region in scene.regions_of(index)]
        speeds = [abs(complex(medium.c(scene.frequencies[-1:])[0])) for medium in media]
        cut_on = factor * min(speeds, default=math.inf) / extent
        if top > cut_on:
            text = (
                f"the sweep ends at {top:g} Hz, above the first cut-on of the duct at {cut_on:.4g} Hz "
                f"({factor:.3g} c / {extent:.3g} m, {words}); other modes than the plane wave come back from the port"
            )
            cure = f"end the sweep below {cut_on:.4g} Hz, or take levels near the port as a guess"
            yield warning("port_above_cut_on", surface.name, text, cure)


def _plane(scene: Scene, triangles: npt.NDArray[np.int64]) -> bool:
    normals = scene.skin.outward(triangles, scene.skin.owners(triangles))
    return bool(np.min(normals @ normals[0]) > math.cos(math.radians(1.0)))


def scans(scene: Scene) -> Iterator[Finding]:
    """The area of scanned surfaces that no scan point covers."""
    names = {surface.name: index for index, surface in enumerate(scene.case.surfaces)}
    for where, load in scene.loads():
        points = load.motion.shape() if isinstance(load, SurfaceVelocity) else None
        if points is None or isinstance(points, str):
            continue
        triangles = scene.case.mesh.triangles[scene.rows(names[load.acts_on])]
        areas = scene.skin.areas(triangles)
        covered = interpolation(points, scene.skin.centroids(triangles)).covered
        missing = float(areas[~covered].sum())
        if missing > UNCOVERED * areas.sum():
            text = (
                f"{missing:.3g} m2 ({missing / areas.sum():.0%} of the surface) lie farther from every scan point than "
                "the points lie apart; the values there are extrapolated"
            )
            cure = "check the coordinates and their unit, scan the rest, or give that part a surface of its own"
            yield warning("scan_uncovered", f"{where}/{load.name}", text, cure)
