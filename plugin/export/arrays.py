"""Point arrays that the VTK exports share, and the words that go with them.

p_re, p_im     complex peak pressure [Pa]; numbered p_re_1, p_im_1, ... where a load case is a sum of mean squares
level_db       rms level re 20 uPa (per hertz for a density); phase_deg only where there is one pressure
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from murmesh.plugin.describe import CONVENTION, FLOOR_DB, hertz, is_density, level_unit, load_case_words, origin, plain
from murmesh.plugin.fields import field_levels
from murmesh.plugin.sampling import Cloud, values_on
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]


def point_arrays(result: Result, cloud: Cloud, frequency: float, load_case: str = "") -> dict[str, Floats]:
    """Named point arrays (k,) of the field kept at `frequency`."""
    pressure = np.asarray(values_on(result.space, cloud, result.field(frequency, load_case)), dtype=np.complex128)
    return named_arrays(result, pressure, load_case)


def named_arrays(result: Result, pressure: npt.NDArray[np.complex128], load_case: str = "") -> dict[str, Floats]:
    """Named point arrays (k,) of pressures (k, r)."""
    columns = pressure.shape[1]
    arrays: dict[str, Floats] = {}
    for r in range(columns):
        tail = "" if columns == 1 else f"_{r + 1}"
        arrays |= {f"p_re{tail}": pressure[:, r].real, f"p_im{tail}": pressure[:, r].imag}
    arrays["level_db"] = field_levels(result, pressure, load_case)
    if columns == 1:
        arrays["phase_deg"] = np.angle(pressure[:, 0], deg=True)
    return {name: np.ascontiguousarray(values) for name, values in arrays.items()}


def header(result: Result, load_case: str = "", frequency: float | None = None) -> dict[str, str]:
    """Conventions, units and origin of the arrays, as plain texts by name."""
    density = is_density(result, load_case)
    words = {
        "convention": CONVENTION,
        "units": f"p_re, p_im: Pa (complex peak); level_db: {level_unit('Z', density)}, not below {FLOOR_DB:g} dB; "
        "phase_deg: degrees; coordinates: m",
        "load_case": load_case_words(result.load_case_of(load_case)),
        "origin": origin(result),
    }
    if frequency is not None:
        words["frequency"] = hertz(frequency)
    return {name: plain(text) for name, text in words.items()}
