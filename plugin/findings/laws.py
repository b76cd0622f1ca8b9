"""Findings about laws and tables: each is evaluated on every line of the sweep, before anything is solved."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from functools import partial
from typing import Any

import numpy as np
import numpy.typing as npt

from murmesh.plugin.findings.finding import Finding, error, warning
from murmesh.plugin.findings.scene import Scene
from murmesh.solver.case.boundary import Boundary
from murmesh.solver.case.load import LoadCase, SurfaceVelocity
from murmesh.solver.case.porous import Fluid
from murmesh.solver.case.spectrum import Table, as_spectrum
from murmesh.solver.case.wall import Given
from murmesh.solver.errors import CaseError, RangeError

Floats = npt.NDArray[np.float64]
Evaluation = Callable[[], Any]
ACTIVE = 1e-9
"""Re Y below -ACTIVE |Y| is not rounding."""
HALF_OCTAVE = 2**0.5
"""From the lowest line so far upwards, a wall shows whether it is a spring or a mass."""


def ranges(scene: Scene) -> Iterator[Finding]:
    """Tables that do not cover the sweep, and laws that fail on it."""
    for subject, compute in (*_admittances(scene), *_drives(scene), *_media(scene), *_loads(scene)):
        try:
            compute()
        except CaseError as problem:
            text, _, cure = str(problem).rpartition("; ")
            code = "table_out_of_range" if isinstance(problem, RangeError) else "law_fails"
            yield error(code, subject, text or cure, cure)


def passivity(scene: Scene) -> Iterator[Finding]:
    """Walls, treatments and media that would create sound somewhere in the sweep."""
    f = scene.frequencies
    for subject, compute in _admittances(scene):
        y = _value(compute)
        active = np.flatnonzero(y.real < -ACTIVE * np.abs(y))
        if len(active):
            first = int(active[0])
            text = (
                f"Re Z < 0 at {len(active)} of {len(f)} lines, first at {f[first]:g} Hz "
                f"(Z = {1 / y[first]:.4g} Pa.s/m): the wall would create sound"
            )
            cure = "check the sign of the real part, the time sign, and the range of the law"
            yield error("active_wall", subject, text, cure)
    for region in scene.case.regions:
        speed = _value(partial(region.medium.c, f))
        growing = np.flatnonzero(speed.imag < -ACTIVE * np.abs(speed))
        if len(growing):
            at = int(growing[0])
            text = f"waves grow in the medium, first at {f[at]:g} Hz (Im c = {speed[at].imag:.3g} m/s)"
            yield error("active_medium", region.name, text, "check the parameters of the law and its range")


def validity(scene: Scene) -> Iterator[Finding]:
    """Laws outside the range that their published source covers."""
    f = scene.frequencies
    said = {(region.name, text) for region in scene.case.regions for text in region.medium.warnings(f)}
    said |= {(t.name, text) for t in scene.case.catalogue if t.wall is not None for text in t.wall.warnings(f)}
    for surface, _, fluid in scene.touching():
        said |= {(surface.name, text) for text in surface.boundary.warnings(f, fluid)}
    cure = "use another law there, a measured table, or take the figures as a guess"
    for subject, text in sorted(said):
        yield warning("law_out_of_range", subject, text, cure)


def time_signs(scene: Scene) -> Iterator[Finding]:
    """Measured walls whose reactance at the lowest lines is that of a spring with the wrong sign: Im Z = K/w.

    A sample on a hard backing is a spring there, Im Z = -K/w in e^{+iwt}, and a mass rises with frequency; only data that
    were taken for e^{-iwt} are positive and fall.
    """
    f = scene.frequencies
    above = int(np.searchsorted(f, f[0] * HALF_OCTAVE))
    for subject, wall, fluid in _measured_walls(scene):
        y = _value(partial(wall.admittance, f, fluid))
        if above == len(f) or not len(y) or not y[[0, above]].all():
            continue
        reactance = (1 / y[[0, above]]).imag
        if reactance[0] > reactance[1] and reactance[0] > 0:
            text = (
                f"Im Z is {reactance[0]:.3g} Pa.s/m at {f[0]:g} Hz and falls to {reactance[1]:.3g} at {f[above]:g} Hz; in "
                "e^(+iwt) a sample on a hard backing has Im Z < 0 at low frequencies, and a heavy wall has Im Z that rises"
            )
            other = "+" if wall.time_sign == "-" else "-"
            cure = f"if the data are for e^({other}iwt), say time_sign = '{other}' beside them; a deep cavity may be meant so"
            yield warning("time_sign_doubtful", subject, text, cure)


def _measured_walls(scene: Scene) -> Iterator[tuple[str, Given, Fluid]]:
    """Every table of an impedance: of surfaces, their sides, and the catalogue."""
    walls = [(s.name, getattr(side, "wall", None), near.fluid) for s, _, near in scene.touching() for side in s.boundary.sides]
    walls += [(t.name, t.wall, scene.case.regions[0].medium.reference) for t in scene.case.catalogue]
    for subject, wall, fluid in walls:
        if isinstance(wall, Given) and isinstance(wall.value, Table):
            yield subject, wall, fluid


def _value(compute: Evaluation) -> npt.NDArray[np.complex128]:
    """What a law gives; nothing where it is hard or fails (`ranges` says so)."""
    try:
        value = compute()
    except CaseError:
        value = None
    return np.empty(0, dtype=np.complex128) if value is None else np.asarray(value)


def _admittances(scene: Scene) -> Iterator[tuple[str, Evaluation]]:
    f = scene.frequencies
    for surface, _, fluid in scene.touching():
        for part, law in _parts(surface.boundary):
            yield f"{surface.name}{part}", partial(law, f, fluid)
    for treatment in scene.case.catalogue:
        if treatment.wall is not None:
            yield treatment.name, partial(treatment.wall.admittance, f, scene.case.regions[0].medium.reference)


def _parts(boundary: Boundary) -> list[tuple[str, Callable[..., Any]]]:
    if len(boundary.sides) == 1:
        return [("", boundary.admittance)]
    names = (" (front)", " (back)")
    sides = [(name, side.admittance) for name, side in zip(names, boundary.sides, strict=True)]
    return [*sides, (" (transfer)", boundary.transfer_admittance)]


def _drives(scene: Scene) -> Iterator[tuple[str, Evaluation]]:
    f = scene.frequencies
    for surface, _, fluid in scene.touching():
        for side in surface.boundary.sides:
            yield surface.name, partial(side.drive, f, fluid)
    for treatment in scene.case.catalogue:
        yield treatment.name, partial(as_spectrum(treatment.velocity_cut).at, f)


def _media(scene: Scene) -> Iterator[tuple[str, Evaluation]]:
    f = scene.frequencies
    for region in scene.case.regions:
        yield region.name, partial(region.medium.c, f)
        yield region.name, partial(region.damping.loss_factor, f, region.medium)
        yield region.name, partial(region.damping.hard_wall_admittance, f, region.medium.reference)


def _loads(scene: Scene) -> Iterator[tuple[str, Evaluation]]:
    for load_case in scene.case.load_cases:
        yield from _of_load_case(load_case, scene.frequencies)


def _of_load_case(load_case: LoadCase, f: Floats) -> Iterator[tuple[str, Evaluation]]:
    yield load_case.name, partial(load_case.combination.matrix, f, len(load_case.loads))
    for load in load_case.loads:
        subject = f"{load_case.name}/{load.name}"
        if isinstance(load, SurfaceVelocity):
            yield subject, partial(load.motion.outward, f)
        for name in ("pressure", "volume_velocity"):
            if hasattr(load, name):
                yield subject, partial(as_spectrum(getattr(load, name)).at, f)
