"""The ranking of panels as CSV."""

from __future__ import annotations

from pathlib import Path

from murmesh.plugin.describe import band_words, level_unit, number
from murmesh.plugin.export import EXPORTS
from murmesh.plugin.export.tables import decibels, write_table
from murmesh.solver.contribution import rank
from murmesh.solver.result import Result

COLUMNS = ("rank", "panel", "share_percent", "alone_db", "if_silent_db")


@EXPORTS.member("ranking_csv", ".csv", "ranking of the panels by what quietening them would do")
def write(
    result: Result,
    path: Path,
    *,
    receivers: tuple[str, ...] = (),
    band: tuple[float, float] | None = None,
    weighting: str = "A",
    load_case: str = "",
) -> Path:
    """Write one row per panel, the largest share first."""
    ranking = rank(result, receivers, band, weighting, load_case)
    unit = level_unit(weighting, power=ranking.power)
    remarks = (
        f"receivers: {', '.join(ranking.receivers)}; band {band_words(ranking.band)}; load case '{ranking.load_case}'; "
        f"mean level {number(ranking.total_db)} {unit}",
        f"share_percent: part of the {ranking.what}, adding up to 100 (closure {ranking.closure:.0e}); alone_db: {unit}; "
        "if_silent_db: change of level if the panel were silent",
        ranking.words,
    )
    rows = [
        (str(i + 1), row.panel, f"{100 * row.share:.2f}", decibels(row.own_db), decibels(row.removal_db))
        for i, row in enumerate(ranking.rows)
    ]
    return write_table(result, path, remarks, COLUMNS, rows)
