"""Transmission loss of a duct between two ports.

    TL = 10 lg (W_in / W_out),   W_in = |p_in|^2 S Re(1/rho c) / 2

W_in is carried by the incoming plane wave on the area S of its port, W_out leaves through the other port, which reflects
nothing of a plane wave (M. L. Munjal, Acoustics of Ducts and Mufflers, Wiley 1987; cited from memory). Both hold below the
first cut-on of the ports, and a warning says so above.
"""

from __future__ import annotations

import math
import warnings

import numpy as np
import numpy.typing as npt

from murmesh.solver.assembly import surface_area
from murmesh.solver.case.load import IncomingWave
from murmesh.solver.case.medium import damped
from murmesh.solver.case.spectrum import as_spectrum
from murmesh.solver.errors import ResultError, ValidityWarning, nearest
from murmesh.solver.result import Result
from murmesh.solver.space import Side
from murmesh.solver.system import adjacent

Floats = npt.NDArray[np.float64]
ROUND = 0.95
"""Area over that of the circle of the same largest diameter from which a port counts as round."""


def transmission_loss(result: Result, outlet: str = "", load_case: str = "") -> Floats:
    """TL (nf,) [dB] from the port where the load case's wave enters to the port `outlet` (none: the only other one).

    Warns (ValidityWarning) of lines above the first cut-on of either port, where other modes than the plane wave count too.
    Raises: ResultError where the load case is not one incoming wave alone, or `outlet` is not a port of the case.
    """
    load = wave_of(result, load_case)
    port = outlet_port(result, load.surface, outlet)
    held, f = result.load_case(load_case), result.frequencies
    limit = min(cut_on(result, name) for name in (load.surface, port))
    if f[-1] > limit:
        warnings.warn(
            f"the transmission loss from '{load.surface}' to '{port}' holds up to the ports' first cut-on at {limit:.4g} Hz, "
            f"but the sweep ends at {f[-1]:g} Hz; take lines above as a guess, or end the sweep there",
            ValidityWarning,
            stacklevel=2,
        )
    incident = 0.5 * np.abs(as_spectrum(load.pressure).at(f)) ** 2 * _conductance(result, load.surface)
    passed = held.absorbed[:, result.power_labels.index(f"surface/{port}")]
    with np.errstate(divide="ignore", invalid="ignore"):
        loss = 10 * np.log10(incident / np.maximum(passed, 0.0))
    return np.asarray(np.where(incident > 0, loss, np.nan))


def _conductance(result: Result, port: str) -> Floats:
    """int Re(1/(rho c)) dS (nf,) over a port."""
    geometry, f = result.space.geometry, result.frequencies
    return np.asarray(
        sum(
            surface_area(geometry, side.tet, side.face) * (1.0 / adjacent(result.case, side.region, f).impedance).real
            for side in _sides(result, port)
        )
    )


def _sides(result: Result, port: str) -> tuple[Side, ...]:
    return result.space.sides_of([surface.name for surface in result.case.surfaces].index(port))


def cut_on(result: Result, port: str) -> float:
    """First cut-on [Hz] of the duct behind a port, at the speed of sound of the highest line."""
    mesh, sides = result.case.mesh, _sides(result, port)
    triangles = mesh.triangles[mesh.triangle_surface == sides[0].surface, :3]
    area = sum(surface_area(result.space.geometry, side.tet, side.face) for side in sides)
    _, factor, extent = port_shape(mesh.nodes[np.unique(triangles)], area)
    regions = [result.case.regions[side.region] for side in sides]
    speeds = [abs(damped(region.medium, region.damping, result.frequencies[-1:])[1][0]) for region in regions]
    return float(factor * min(speeds) / extent)


def port_shape(points: Floats, area: float) -> tuple[str, float, float]:
    """Words, factor and size d of the first cut-on f = factor c / d of a plane duct section through `points`.

    Round: 1.8412 c/(pi d) (j'_11, Pierce, Acoustics, 1981, sect. 7-1); otherwise as a rectangle, c/(2 d).
    """
    centred = points - points.mean(axis=0)
    plane = centred @ np.linalg.svd(centred, full_matrices=False)[2][:2].T
    angles = np.linspace(0.0, np.pi / 2, 181)
    turned = [plane @ np.array([[np.cos(a), -np.sin(a)], [np.sin(a), np.cos(a)]]) for a in angles]
    boxes = np.array([np.ptp(t, axis=0) for t in turned])
    diameter = float(boxes.max())
    if area > ROUND * math.pi * diameter**2 / 4:
        return "round", 1.8412 / math.pi, diameter
    return "by its longer side", 0.5, float(boxes[np.argmin(boxes.prod(axis=1))].max())


def wave_of(result: Result, load_case: str = "") -> IncomingWave:
    """The incoming wave that is all of a load case. Raises ResultError where it holds anything else."""
    loads = result.load_case_of(load_case).loads
    if len(loads) == 1 and isinstance(loads[0], IncomingWave):
        return loads[0]
    raise ResultError(
        f"a transmission loss needs a load case of one incoming wave alone, but '{result.load_case(load_case).name}' holds "
        f"{', '.join(load.name for load in loads)}; add a load case with the wave, or name it"
    )


def outlet_port(result: Result, inlet: str, wanted: str = "") -> str:
    """The port asked for, or the only one that is not the inlet. Raises ResultError where there is none, or no such one."""
    ports = [s.name for s in result.case.surfaces if s.boundary.takes_wave and s.name != inlet]
    if wanted in ports or (not wanted and len(ports) == 1):
        return wanted or ports[0]
    if not ports:
        raise ResultError(f"no port but '{inlet}', where the wave enters; give the outlet the kind 'port'")
    if not wanted:
        raise ResultError(f"the sound may leave through {', '.join(ports)}; name one of them as the outlet")
    raise ResultError(f"no port to leave through is called '{wanted}'; {nearest(wanted, ports)}")
