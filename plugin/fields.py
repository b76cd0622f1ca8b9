"""Which line of a kept field to show, and the levels of pressures as a load case means them.

<p^2> = (1/2) sum_r |p_r|^2 / bandwidth        r columns whose mean squares add; bandwidth 1 for tones
L     = 10 lg(<p^2> / (20 uPa)^2)
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from murmesh.plugin.describe import FLOOR_DB, is_density
from murmesh.solver.errors import ResultError
from murmesh.solver.levels import level
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]


def kept_line(result: Result, frequency: float | None = None, load_case: str = "") -> float:
    """The kept line nearest to `frequency`, or (None) the one that is loudest at the receivers; a model keeps every line.

    Raises ResultError where no field is kept, or none near `frequency`.
    """
    lines = result.field_frequencies if frequency is None or result.model is None else result.frequencies
    if not len(lines):
        raise ResultError("the result keeps no field; name the lines to keep as field_frequencies and solve again")
    if frequency is not None:
        result.field(frequency, load_case)
        return float(lines[np.abs(lines - frequency).argmin()])
    if not result.case.receivers:
        return float(lines[0])
    at = np.searchsorted(result.frequencies, lines)
    heard = sum(result.mean_square(receiver.name, load_case)[at] for receiver in result.case.receivers)
    return float(lines[int(np.argmax(heard))])


def listed_receivers(result: Result, receivers: Sequence[str] = ()) -> tuple[str, ...]:
    """The receivers named, or all of them. Raises ResultError for an unknown name, or where there is none at all."""
    for name in receivers:
        result.receiver(name)
    listed = tuple(receivers) or tuple(receiver.name for receiver in result.case.receivers)
    if not listed:
        raise ResultError("the case has no receiver, so nothing can be shown at one; add a receiver and solve again")
    return listed


def mean_squares(result: Result, pressure: Complex, load_case: str = "") -> Floats:
    """Mean squares (k,) [Pa2, or Pa2/Hz for a density] of complex peak pressures (k, r)."""
    bandwidth = result.load_case_of(load_case).bandwidth if is_density(result, load_case) else 1.0
    return np.asarray(0.5 * np.sum(np.abs(pressure) ** 2, axis=1) / bandwidth)


def field_levels(result: Result, pressure: Complex, load_case: str = "") -> Floats:
    """Levels (k,) [dB re 20 uPa, rms] of pressures (k, r), not below a stated floor; nan stays nan."""
    return np.asarray(np.maximum(level(mean_squares(result, pressure, load_case)), FLOOR_DB))
