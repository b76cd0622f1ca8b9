"""Signed shares of the panels in a band, sorted: how much each adds to, or takes off, the mean square."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Patch

from murmesh.plugin.describe import (
    CONVENTION,
    WEIGHTING,
    band_words,
    level_unit,
    load_case_words,
    names,
    number,
    origin,
    short,
    signed,
)
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.pictures.style import ACCENT, INK, LINES, QUIET, WIDTH, look, page, save
from murmesh.solver.contribution import Ranking, rank
from murmesh.solver.result import Result

_BAR = 0.30  # inches per panel
_COLUMNS = (0.75, 1.65, 2.6)  # inches from the bars to the right edge of each
_UP = {"facecolor": LINES[0][0], "edgecolor": INK}
_DOWN = {"facecolor": "white", "edgecolor": ACCENT, "hatch": "/////"}


@PICTURES.member("contribution_bars", ".png", "signed share of every panel in a band, sorted")
def draw(
    result: Result,
    path: Path,
    *,
    receivers: tuple[str, ...] = (),
    band: tuple[float, float] | None = None,
    weighting: str = "A",
    load_case: str = "",
) -> Path:
    """Draw the ranking over `band` (None: the whole sweep), summed over `receivers` (none: all)."""
    with look():
        return save(figure(result, receivers, band, weighting, load_case), path)


def figure(
    result: Result,
    receivers: Sequence[str] = (),
    band: tuple[float, float] | None = None,
    weighting: str = "A",
    load_case: str = "",
) -> Figure:
    """The figure, for further work."""
    ranking = rank(result, receivers, band, weighting, load_case)
    sheet = page(
        f"Which panel to quieten: shares of the {ranking.what}",
        ranking_facts(result, ranking),
        [*ranking_notes(ranking), _columns_note(ranking), f"Convention: {CONVENTION}. {origin(result)}."],
        len(ranking.rows) * _BAR + 1.2,
    )
    axes = sheet.axes(2.35, 0.75, sheet.width - 2.35 - 2.8, len(ranking.rows) * _BAR)
    _bars(axes, ranking)
    axes.set_xlabel(f"share of the {ranking.what} [%]")
    _table(axes, ranking)
    handles = [Patch(label="raises the level", **_UP), Patch(label="lowers the level", **_DOWN)]  # type: ignore[arg-type]
    axes.legend(handles=handles, loc="lower left", bbox_to_anchor=(0.0, 1.0), ncols=2, borderaxespad=0.4)
    return sheet.figure


def ranking_facts(result: Result, ranking: Ranking) -> list[str]:
    """What a ranking is of: receivers, band, weighting, level, load case."""
    case = result.load_case_of(ranking.load_case)
    what = "mean over " if len(ranking.receivers) > 1 else ""
    return [
        f"{what}{names(ranking.receivers)} · {band_words(ranking.band)} · {WEIGHTING[ranking.weighting]} · "
        f"{number(ranking.total_db)} {level_unit(ranking.weighting, power=ranking.power)}",
        load_case_words(case),
    ]


def ranking_notes(ranking: Ranking) -> list[str]:
    """What a ranking means, and that its shares add up."""
    total = 100 * sum(row.share for row in ranking.rows)
    return [
        ranking.words,
        f"The shares add up to {total:.1f} % of the {ranking.what} (to within {max(ranking.closure, 1e-16):.0e}).",
    ]


def _columns_note(ranking: Ranking) -> str:
    unit = level_unit(ranking.weighting, power=ranking.power)
    return f"“alone”: level of the panel by itself, {unit}; “if silent”: change of the level if the panel did not move."


def _bars(axes: Axes, ranking: Ranking) -> None:
    shares = np.array([100 * row.share for row in ranking.rows])
    for i, share in enumerate(shares):
        axes.barh(i, share, 0.68, linewidth=0.8, **(_UP if share >= 0 else _DOWN))  # type: ignore[arg-type]
    low, high = 10 * np.floor(min(shares.min(), 0) / 10), 10 * np.ceil(max(shares.max(), 10) / 10)
    axes.set_xlim(low, high)
    axes.set_ylim(len(shares) - 0.5, -0.5)
    axes.set_yticks(range(len(shares)), [short(row.panel, 22) for row in ranking.rows], fontsize=11)
    axes.tick_params(axis="y", length=0)
    axes.axvline(0, color=INK, linewidth=1.0)
    axes.grid(True, axis="x")
    axes.set_axisbelow(True)
    axes.spines["left"].set_visible(False)


def _table(axes: Axes, ranking: Ranking) -> None:
    width = axes.get_position().width * WIDTH
    place = axes.get_yaxis_transform()
    headings = "share\n[%]", f"alone\n[{level_unit(ranking.weighting).split(' re ')[0]}]", "if silent\n[dB]"
    for j, (heading, inches) in enumerate(zip(headings, _COLUMNS, strict=True)):
        x = 1 + inches / width
        axes.text(x, -0.75, heading, transform=place, ha="right", va="bottom", color=QUIET, fontsize=10)
        for i, row in enumerate(ranking.rows):
            cell = (signed(100 * row.share), number(row.own_db), signed(row.removal_db))[j]
            axes.text(x, i, cell, transform=place, ha="right", va="center", fontsize=10.5)
