"""Sound power that leaves through surfaces that radiate: in all, and the part of every load.

    W = Re sum_ij conj(G_ij) P_ij

with G of the load case's combination, as for mean squares, and P the Hermitian form of the fields of the loads by themselves,
which the sweep works out on every line (`power.radiated_forms`). A power is handed on as the mean square whose level re 20 uPa
is the level of the power re 1 pW (`PER_WATT`), so that rankings, bands and comparisons take it like a receiver: *a place*.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.load import IncidentField
from murmesh.solver.errors import ResultError, nearest
from murmesh.solver.levels import P0, W0
from murmesh.solver.power import RADIATED_LABEL, radiated_labels
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]

RADIATED, THROUGH = "radiated power", "radiated power through "
"""Names of places: all that is radiated, and that through one surface (its name follows)."""
PER_WATT = P0**2 / W0
"""Pa2 per watt."""


def is_power(place: str) -> bool:
    """Whether a place is a radiated power, not a receiver."""
    return place == RADIATED or place.startswith(THROUGH)


def places(result: Result, load_case: str = "") -> tuple[str, ...]:
    """The receivers, then what is radiated: in all, and through each surface where there are several; nothing is radiated
    that can be told apart where a load comes from outside."""
    receivers = tuple(receiver.name for receiver in result.case.receivers)
    labels = () if _from_outside(result, load_case) else radiated_labels(result.power_labels)
    surfaces = [label.removeprefix(RADIATED_LABEL) for label in labels]
    each = tuple(THROUGH + name for name in surfaces) if len(surfaces) > 1 else ()
    return (*receivers, *((RADIATED, *each) if surfaces else ()))


def mean_square(result: Result, place: str, load_case: str = "") -> Floats:
    """The mean square (nf,) [Pa2, per hertz for a density] at a receiver, or `PER_WATT` times a radiated power.

    Raises: ResultError for an unknown place, or a radiated power where a load comes from outside.
    """
    if not is_power(place):
        return result.mean_square(place, load_case)
    held, labels = result.load_case(load_case), _labels(result, place, load_case)
    columns = [result.power_labels.index(label) for label in labels]
    return np.asarray(PER_WATT * held.absorbed[:, columns].sum(axis=1) / result.bandwidth(load_case))


def pair_squares(result: Result, place: str, load_case: str = "") -> Floats:
    """Re of the terms of the double sum over loads, (nf, loads, loads), at a receiver or of a radiated power.

    Raises: ResultError for an unknown place, loads that come from outside (what they bring cannot be told from the rest), or a
    result from before the form was kept.
    """
    if not is_power(place):
        return result.pair_squares(place, load_case)
    labels, held = _labels(result, place, load_case), result.load_case(load_case)
    if not held.radiated.size:
        raise ResultError("the result does not hold what single loads radiate; solve the case again")
    form = held.radiated[:, [radiated_labels(result.power_labels).index(label) for label in labels]].sum(axis=1)
    pairs = np.real(result.combination(load_case).conj() * form)
    return np.asarray(PER_WATT * pairs / result.bandwidth(load_case))


def _from_outside(result: Result, load_case: str) -> str:
    """The name of a load that comes from outside; none where there is none."""
    loads = result.load_case_of(load_case).loads
    return next((load.name for load in loads if isinstance(load, IncidentField)), "")


def _labels(result: Result, place: str, load_case: str) -> tuple[str, ...]:
    labels = radiated_labels(result.power_labels)
    if not labels:
        raise ResultError(f"nothing radiates in this case, so there is no '{place}'; give a surface the kind 'radiating'")
    if wave := _from_outside(result, load_case):
        raise ResultError(
            f"'{wave}' is a sound field from outside, so what passes the surface is not what the model radiates; ask for "
            "a load case without such loads"
        )
    if place == RADIATED:
        return labels
    name = place.removeprefix(THROUGH)
    if RADIATED_LABEL + name not in labels:
        names = [label.removeprefix(RADIATED_LABEL) for label in labels]
        raise ResultError(f"no surface that radiates is called '{name}'; {nearest(name, names)}")
    return (RADIATED_LABEL + name,)
