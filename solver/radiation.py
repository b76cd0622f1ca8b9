"""Sound power that leaves through surfaces that radiate: in all, and the part of every load.

The infinite elements' terms of the sum take what is radiated, so with u_i the field of load i alone and real A_j

    W = sum_ij G_ij u_j^H R u_i,   R = (1/2w) sum_j [ phi_j A_j - conj(phi_j) A_j^T ] / 2i   (Hermitian)

with G of the load case's combination, as for mean squares. A power is handed on as the mean square whose level re 20 uPa is
the level of the power re 1 pW (`PER_WATT`), so that rankings, bands and comparisons take it like a receiver: *a place*.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.load import IncidentField
from murmesh.solver.engine import Drive, Engine
from murmesh.solver.errors import ResultError, nearest
from murmesh.solver.levels import P0, W0
from murmesh.solver.receiver_points import locate_receivers
from murmesh.solver.result import Result
from murmesh.solver.system import build_system

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]

RADIATED, THROUGH = "radiated power", "radiated power through "
"""Names of places: all that is radiated, and that through one surface (its name follows)."""
PER_WATT = P0**2 / W0
"""Pa2 per watt."""
_LABEL = "radiated/"


def is_power(place: str) -> bool:
    """Whether a place is a radiated power, not a receiver."""
    return place == RADIATED or place.startswith(THROUGH)


def places(result: Result) -> tuple[str, ...]:
    """The receivers, then what is radiated: in all, and through each surface where there are several."""
    receivers = tuple(receiver.name for receiver in result.case.receivers)
    surfaces = [label.removeprefix(_LABEL) for label in result.power_labels if label.startswith(_LABEL)]
    each = tuple(THROUGH + name for name in surfaces) if len(surfaces) > 1 else ()
    return (*receivers, *((RADIATED, *each) if surfaces else ()))


def mean_square(result: Result, place: str, load_case: str = "") -> Floats:
    """The mean square (nf,) [Pa2, per hertz for a density] at a receiver, or `PER_WATT` times a radiated power.

    Raises: ResultError for an unknown place.
    """
    if not is_power(place):
        return result.mean_square(place, load_case)
    held = result.load_case(load_case)
    columns = [result.power_labels.index(label) for label in _labels(result, place)]
    return np.asarray(PER_WATT * held.absorbed[:, columns].sum(axis=1) / result.bandwidth(load_case))


def pair_squares(result: Result, place: str, load_case: str = "") -> Floats:
    """Re of the terms of the double sum over loads, (nf, loads, loads), at a receiver or of a radiated power.

    The fields of single loads come from the reduced model, or else from a new solution of every line.

    Raises: ResultError for an unknown place, or loads that come from outside (what they bring cannot be told from the rest).
    """
    if not is_power(place):
        return result.pair_squares(place, load_case)
    number = [held.name for held in result.load_cases].index(result.load_case(load_case).name)
    if any(isinstance(load, IncidentField) for load in result.case.load_cases[number].loads):
        raise ResultError("the load case holds a sound field from outside: its power cannot be given to single loads")
    mixed = result.combination(load_case)
    labels, engine = _labels(result, place), _engine(result)
    found = [np.real(g * form) for g, form in zip(mixed, _forms(engine, result, number, labels), strict=True)]
    return np.asarray(PER_WATT * np.stack(found) / result.bandwidth(load_case))


def _labels(result: Result, place: str) -> tuple[str, ...]:
    labels = tuple(label for label in result.power_labels if label.startswith(_LABEL))
    if not labels:
        raise ResultError(f"nothing radiates in this case, so there is no '{place}'; give a surface the kind 'radiating'")
    if place == RADIATED:
        return labels
    name = place.removeprefix(THROUGH)
    if _LABEL + name not in labels:
        names = [label.removeprefix(_LABEL) for label in labels]
        raise ResultError(f"no surface that radiates is called '{name}'; {nearest(name, names)}")
    return (_LABEL + name,)


def _engine(result: Result) -> Engine:
    if result.engine is not None:
        return result.engine
    return Engine.of(build_system(result.space, locate_receivers(result.case, result.space.geometry)))


def _forms(engine: Engine, result: Result, number: int, labels: tuple[str, ...]) -> Iterator[Complex]:
    """u_j^H R u_i, (loads, loads), of every line."""
    system = engine.system
    terms = [(k, term.matrix) for k, term in enumerate(system.terms) if term.label in labels]
    for f, values in zip(result.frequencies, system.values(result.frequencies), strict=True):
        matrix = system.matrix(values.phi)
        drive = Drive.of(system.load_sets[number], matrix, values.psi[number], values.mix[number])
        fields = drive.given.copy()
        fields[engine.free] += engine.factor(matrix).solve(np.ascontiguousarray(drive.inside[engine.free]))
        taken = sum((values.phi[k] * _product(a, fields) for k, a in terms), np.zeros_like(fields))
        form = fields.conj().T @ taken  # u_j^H A u_i at [j, i]
        yield ((form - form.conj().T) / (2j * 4 * np.pi * f)).T


def _product(matrix: Any, fields: Complex) -> Complex:
    return np.asarray(matrix @ fields.real + 1j * (matrix @ fields.imag))
