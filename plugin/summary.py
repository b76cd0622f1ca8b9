"""Levels as people read them: per receiver, per load case, overall and in third octaves. One place for text, CSV, charts."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.medium import damped
from murmesh.solver.levels import Band, band_energy, level, overall_energy, third_octaves
from murmesh.solver.radiation import is_power, mean_square, places
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]
PARTIAL = 0.98
"""A band is called partial when the sweep covers less of it."""

CAUTIONS = (
    "Predictions are not measurements, noise declarations or exposure assessments. Hearing limits and declaration duties "
    "are set by local law and standards and decided by qualified people. Not modelled: sound through walls, air-borne "
    "paths, flow, and the panels' response to treatment or to the air."
)


@dataclass(frozen=True, eq=False)
class Bars:
    """Mesh error bars [dB] of the levels, as if every line of a band erred the same way, and the levels corrected by the
    next order."""

    overall: float
    bands: Floats
    corrected_overall: float
    corrected_bands: Floats


@dataclass(frozen=True, eq=False)
class Levels:
    """Levels [dB re 20 uPa, rms] at one receiver, or of a radiated power [dB re 1 pW], for one load case; -inf where nothing
    falls into a band."""

    receiver: str
    load_case: str
    spectrum: str
    weighting: str
    overall: float
    bands: tuple[Band, ...]
    band_levels: Floats
    coverage: Floats
    bars: Bars | None = None

    @property
    def unit(self) -> str:
        """The unit of the levels, with weighting and reference."""
        unit = f"dB({self.weighting})" if self.weighting != "Z" else "dB"
        return f"{unit} re {'1 pW' if self.power else '20 uPa'}"

    @property
    def heading(self) -> str:
        """The place as the heading of a column of levels re 20 uPa: a sound power says its own reference."""
        return f"{self.receiver} [re 1 pW]" if self.power else self.receiver

    @property
    def power(self) -> bool:
        """Whether these are levels of a sound power."""
        return is_power(self.receiver)


def levels(result: Result, receiver: str, load_case: str = "", weighting: str = "A", other: Floats | None = None) -> Levels:
    """Overall and third-octave levels at a receiver or of a radiated power; or those of another mean square (nf,) there, which
    has no error bar."""
    held = result.load_case_of(load_case)
    square = mean_square(result, receiver, load_case) if other is None else other
    f = result.frequencies
    # a tone belongs to the band it lies in, so the outermost bands need not be covered whole
    bands = third_octaves(float(f[0]), float(f[-1]))
    coverage = band_energy(f, square, bands, held.spectrum, weighting)[1]

    def read(squares: Floats) -> tuple[float, Floats]:
        energy = band_energy(f, squares, bands, held.spectrum, weighting)[0]
        return float(level(overall_energy(f, squares, held.spectrum, weighting))), np.asarray(level(energy))

    overall, found = read(square)
    bar, corrected, bars = None, None, None
    if not is_power(receiver):
        bar, corrected = result.mesh_bar(receiver, load_case), result.corrected(receiver, load_case)
    if other is None and bar is not None and corrected is not None:
        high, high_bands = read(square * 10 ** (bar / 10))
        heard = np.isfinite(found)
        widths = np.subtract(high_bands, found, out=np.full(len(found), np.nan), where=heard)
        bars = Bars(high - overall, widths, *read(corrected))
    return Levels(receiver, held.name, held.spectrum, weighting, overall, tuple(bands), found, coverage, bars)


def all_levels(result: Result, weighting: str = "A", load_case: str = "") -> list[Levels]:
    """Levels of every receiver and of what is radiated, for one load case or (without a name) for all."""
    names = [load_case] if load_case else [held.name for held in result.load_cases]
    return [levels(result, place, name, weighting) for name in names for place in places(result, name)]


def shown(value: float, bar: float = float("nan")) -> str:
    """A level as people read it, rounded to what its error bar justifies; a dash where there is none."""
    if not np.isfinite(value):
        return "-"
    if not np.isfinite(bar):
        return f"{value:.1f}"
    digits = 0 if bar >= 0.5 else 1
    return f"{value:.{digits}f} ±{max(bar, 0.1):.{digits}f}"


def outside_facts(result: Result) -> list[tuple[str, str]]:
    """What the infinite elements rest on, by surface: radial functions, k a at the highest line, condition number there."""
    facts = []
    for outer in result.space.envelopes if result.radiates else ():
        found, top = outer.envelope, result.frequencies[-1:]
        region = result.case.regions[outer.region]
        k = float((2 * np.pi * top / damped(region.medium, region.damping, top)[1])[0].real)
        words = (
            f"{found.radial} radial functions, k a up to {k * found.largest_radius:.2g} (a: farthest point of the surface), "
            f"condition number of the scaled radial matrices {found.condition(k):.2g}"
        )
        facts.append((f"infinite elements on {outer.name}", words))
    return facts


def trust(result: Result) -> str:
    """What is known about the numerical error of the levels: mesh bar and certificate; an empty text where nothing is."""
    parts = []
    if any(held.mesh_error.size for held in result.load_cases):
        parts.append("± dB (mesh): what elements of the next order would change, every line of a band erring the same way")
    if result.certificate is not None:
        parts.append(f"reduced sweep: {result.certificate.words}")
    parts += [f"{name}: {words}" for name, words in outside_facts(result)]
    return "\n".join(parts)
