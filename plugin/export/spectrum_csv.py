"""Narrow-band levels as CSV: the mean square and its level at every receiver and frequency."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import numpy as np

from murmesh.plugin.describe import is_density
from murmesh.plugin.export import EXPORTS
from murmesh.plugin.export.tables import chosen, decibels, quantity, write_table
from murmesh.solver.levels import A_weighting, level
from murmesh.solver.result import Result

COLUMNS = ("load_case", "spectrum", "receiver", "frequency_hz", "mean_square_pa2", "level_db", "level_dba", "mesh_bar_db")
REMARKS = (
    "mean_square_pa2: rms pressure squared (per hertz where the spectrum is a density)",
    "level_db: dB re 20 uPa (per hertz for a density), unweighted; level_dba: A-weighted at the line's own frequency",
    "mesh_bar_db: +- error bar of the mesh (what elements of the next order would change); empty where not solved",
)


@EXPORTS.member("spectrum_csv", ".csv", "narrow-band levels per receiver")
def write(result: Result, path: Path, *, receivers: tuple[str, ...] = (), load_case: str = "") -> Path:
    """Write one row per load case, receiver and frequency."""
    return write_table(result, path, REMARKS, COLUMNS, _rows(result, receivers, load_case))


def _rows(result: Result, receivers: tuple[str, ...], load_case: str) -> Iterator[tuple[str, ...]]:
    weights = np.asarray(A_weighting(result.frequencies))
    for case, receiver in chosen(result, receivers, load_case):
        square = result.mean_square(receiver, case)
        levels = np.asarray(level(square))
        kind = "density" if is_density(result, case) else "tones"
        bar = result.mesh_bar(receiver, case)
        bars = [""] * len(square) if bar is None else [f"{value:.4f}" for value in bar]
        for f, p2, plain_db, weight, width in zip(result.frequencies, square, levels, weights, bars, strict=True):
            yield case, kind, receiver, f"{f:.9g}", quantity(p2), decibels(plain_db), decibels(plain_db + weight), width
