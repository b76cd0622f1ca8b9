"""The words and units that stand on every picture, table and file: said in one place.

Texts for pictures carry Greek letters; texts for files are plain ASCII (`plain`).
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from murmesh.solver.case.load import LoadCase
from murmesh.solver.orders import orders_text
from murmesh.solver.result import Result

CONVENTION = "exp(+iωt), complex peak amplitudes; levels rms re 20 µPa; normals point out of the fluid"
WEIGHTING = {"A": "A-weighted", "C": "C-weighted", "Z": "no frequency weighting"}
FLOOR_DB = -100.0
"""Level written where the pressure vanishes: files and colour maps need a number."""

_PLAIN = {"ω": " omega ", "µ": "u", "·": "|", "–": "-", "−": "-", "²": "2", "°": "deg"}


def plain(text: str) -> str:
    """The same text in ASCII, for files."""
    for sign, word in _PLAIN.items():
        text = text.replace(sign, word)
    return text.replace("  ", " ")


def level_unit(weighting: str = "Z", density: bool = False, power: bool = False) -> str:
    """The unit of a level, of sound pressure or of sound power, with weighting, reference and (for a density) the bandwidth
    it holds in."""
    unit = f"dB({weighting})" if weighting in ("A", "C") else "dB"
    return f"{unit} re {'1 pW' if power else '20 µPa'}" + (" per Hz" if density else "")


def is_density(result: Result, load_case: str = "") -> bool:
    """Whether a load case's amplitudes hold per hertz."""
    return result.load_case_of(load_case).spectrum == "density"


def hertz(f: float) -> str:
    """A frequency as people read it."""
    return f"{f:.4g} Hz" if f < 1000 else f"{f:.5g} Hz"


def band_words(band: tuple[float, float]) -> str:
    """A band as people read it."""
    return f"{band[0]:.4g}–{hertz(band[1])}"


def number(value: float) -> str:
    """A level to 0.1 dB, or a dash where there is none."""
    return f"{value:.1f}" if np.isfinite(value) else "–"


def signed(value: float, unit: str = "", digits: int = 1) -> str:
    """A change or share with its sign, to 0.1; what rounds to nothing carries no sign."""
    still = abs(value) < 0.5 * 10.0**-digits
    text = f"{0:.{digits}f}" if still else f"{value:+.{digits}f}".replace("-", "−")
    return (text if np.isfinite(value) else "–") + unit


def load_case_words(case: LoadCase) -> str:
    """Which load case, what its spectrum is and how its loads combine."""
    kind = "tones" if case.spectrum == "tones" else "density"
    return f"load case ‘{case.name}’ ({kind}, {case.combination.kind_name.replace('_', ' ')} loads)"


def names(items: Iterable[str], most: int = 4) -> str:
    """Names in a row; the count where they are many."""
    listed = list(items)
    return ", ".join(listed) if len(listed) <= most else f"{', '.join(listed[:most])} and {len(listed) - most} more"


def short(name: str, most: int) -> str:
    """A name in at most so many letters, its middle left out where it is longer."""
    return name if len(name) <= most else f"{name[: most - most // 2 - 1]}…{name[-(most // 2) :]}"


def origin(result: Result) -> str:
    """Where a number comes from: the case, its checksum, the orders of the elements."""
    title = result.case.title or "untitled case"
    return f"{title} · case {result.case.checksum[:8]} · elements of {orders_text(result.orders)}"
