"""Third-octave and overall levels as CSV."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

from murmesh.plugin.export import EXPORTS
from murmesh.plugin.export.tables import chosen, decibels, write_table
from murmesh.plugin.summary import CAUTIONS, levels
from murmesh.solver.result import Result

COLUMNS = (
    "load_case", "receiver", "weighting", "band_hz", "lower_hz", "upper_hz",
    "level_db", "mesh_bar_db", "corrected_db", "covered",
)  # fmt: skip
REMARKS = (
    "level_db: band level, dB re 20 uPa, with the frequency weighting named beside it (Z: none)",
    "mesh_bar_db: +- error bar of the mesh; corrected_db: the level with elements of the next order; empty where not solved",
    "covered: part of the band inside the sweep; the band 'overall' is the whole sweep, nothing beyond it",
    CAUTIONS,
)


@EXPORTS.member("bands_csv", ".csv", "overall and third-octave levels per receiver")
def write(result: Result, path: Path, *, receivers: tuple[str, ...] = (), load_case: str = "", weighting: str = "A") -> Path:
    """Write one row per load case, receiver and band, weighted and (Z) not."""
    return write_table(result, path, REMARKS, COLUMNS, _rows(result, receivers, load_case, weighting))


def _rows(result: Result, receivers: tuple[str, ...], load_case: str, weighting: str) -> Iterator[tuple[str, ...]]:
    low, high = f"{result.frequencies[0]:.6g}", f"{result.frequencies[-1]:.6g}"
    for case, receiver in chosen(result, receivers, load_case):
        for weight in dict.fromkeys((weighting, "Z")):
            found = levels(result, receiver, case, weight)
            bars = found.bars
            mesh = (decibels(bars.overall), decibels(bars.corrected_overall)) if bars else ("", "")
            yield case, receiver, weight, "overall", low, high, decibels(found.overall), *mesh, "1.00"
            for i, band in enumerate(found.bands):
                edges = f"{band.lower:.6g}", f"{band.upper:.6g}"
                mesh = (decibels(bars.bands[i]), decibels(bars.corrected_bands[i])) if bars else ("", "")
                cells = decibels(found.band_levels[i]), *mesh, f"{found.coverage[i]:.2f}"
                yield case, receiver, weight, band.nominal, *edges, *cells
