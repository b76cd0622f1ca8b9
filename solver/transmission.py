"""Transmission loss of a duct between two ports.

    TL = 10 lg (W_in / W_out),   W_in = |p_in|^2 S Re(1/rho c) / 2

W_in is carried by the incoming plane wave on the area S of its port, W_out leaves through the other port, which reflects
nothing of a plane wave (M. L. Munjal, Acoustics of Ducts and Mufflers, Wiley 1987; cited from memory). Both hold below the
first cut-on of the ports; the tag check warns above.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from murmesh.solver.assembly import surface_area
from murmesh.solver.case.load import IncomingWave
from murmesh.solver.case.spectrum import as_spectrum
from murmesh.solver.errors import ResultError, nearest
from murmesh.solver.result import Result
from murmesh.solver.system import adjacent

Floats = npt.NDArray[np.float64]


def transmission_loss(result: Result, outlet: str = "", load_case: str = "") -> Floats:
    """TL (nf,) [dB] from the port where the load case's wave enters to the port `outlet` (none: the only other one).

    Raises: ResultError where the load case is not one incoming wave alone, or `outlet` is not a port of the case.
    """
    load = wave_of(result, load_case)
    port = outlet_port(result, load.surface, outlet)
    held, f = result.load_case(load_case), result.frequencies
    index = [surface.name for surface in result.case.surfaces].index(load.surface)
    sides = result.space.sides_of(index)
    area = sum(surface_area(result.space.geometry, side.tet, side.face) for side in sides)
    conductance = (1.0 / adjacent(result.case, sides[0].region, f).impedance).real
    incident = 0.5 * np.abs(as_spectrum(load.pressure).at(f)) ** 2 * area * conductance
    passed = held.absorbed[:, result.power_labels.index(f"surface/{port}")]
    with np.errstate(divide="ignore"):
        return np.asarray(10 * np.log10(incident / np.maximum(passed, 0.0)))


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
