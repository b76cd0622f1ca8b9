"""The ranking of panels as JSON."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np

from murmesh.plugin.describe import CONVENTION, level_unit, origin, plain
from murmesh.plugin.export import EXPORTS
from murmesh.plugin.files import written
from murmesh.solver.contribution import Ranking, rank
from murmesh.solver.result import Result


@EXPORTS.member("ranking_json", ".json", "ranking of the panels, for scripts")
def write(
    result: Result,
    path: Path,
    *,
    receivers: tuple[str, ...] = (),
    band: tuple[float, float] | None = None,
    weighting: str = "A",
    load_case: str = "",
) -> Path:
    """Write the ranking with its meaning, band, weighting and closure."""
    tree = ranking_tree(rank(result, receivers, band, weighting, load_case))
    tree |= {"origin": plain(origin(result)), "convention": plain(CONVENTION)}
    with written(path) as scratch:
        scratch.write_text(json.dumps(tree, indent=1, allow_nan=False) + "\n", encoding="utf-8")
    return Path(path)


def ranking_tree(ranking: Ranking) -> dict[str, object]:
    """The ranking as plain numbers and texts; null where a panel makes no sound."""

    def decibels(value: float) -> float | None:
        return round(value, 2) if np.isfinite(value) else None

    rows = [
        {
            "panel": row.panel,
            "share": row.share,
            "alone_db": decibels(row.own_db),
            "if_silent_db": decibels(row.removal_db),
        }
        for row in ranking.rows
    ]
    return {
        "meaning": ranking.words,
        "receivers": list(ranking.receivers),
        "load_case": ranking.load_case,
        "band_hz": list(ranking.band),
        "unit": plain(level_unit(ranking.weighting, power=ranking.power)),
        "level_db": decibels(ranking.total_db),
        "closure": ranking.closure,
        "panels": rows,
    }
