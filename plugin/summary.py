"""Levels as people read them: per receiver, per load case, overall and in third octaves. One place for text, CSV, charts."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from murmesh.solver.levels import Band, band_energy, level, overall_energy, third_octaves
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
class Levels:
    """Levels [dB re 20 uPa, rms] at one receiver for one load case; -inf where nothing falls into a band."""

    receiver: str
    load_case: str
    spectrum: str
    weighting: str
    overall: float
    bands: tuple[Band, ...]
    band_levels: Floats
    coverage: Floats

    @property
    def unit(self) -> str:
        """The unit of the levels, with weighting and reference."""
        return f"dB({self.weighting}) re 20 uPa" if self.weighting != "Z" else "dB re 20 uPa"


def levels(result: Result, receiver: str, load_case: str = "", weighting: str = "A") -> Levels:
    """Overall and third-octave levels at a receiver."""
    held = result.load_case_of(load_case)
    square = result.mean_square(receiver, load_case)
    f = result.frequencies
    # a tone belongs to the band it lies in, so the outermost bands need not be covered whole
    bands = third_octaves(float(f[0]), float(f[-1]))
    energy, coverage = band_energy(f, square, bands, held.spectrum, weighting)
    total = overall_energy(f, square, held.spectrum, weighting)
    found = np.asarray(level(energy))
    return Levels(receiver, held.name, held.spectrum, weighting, float(level(total)), tuple(bands), found, coverage)


def all_levels(result: Result, weighting: str = "A", load_case: str = "") -> list[Levels]:
    """Levels of every receiver, for one load case or (without a name) for all."""
    names = [load_case] if load_case else [held.name for held in result.load_cases]
    return [levels(result, receiver.name, name, weighting) for name in names for receiver in result.case.receivers]


def shown(value: float) -> str:
    """A level as people read it: one decimal, or a dash where there is none."""
    return f"{value:.1f}" if np.isfinite(value) else "-"
