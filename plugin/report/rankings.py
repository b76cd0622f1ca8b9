"""Two rankings that must not be mixed: what quietening a panel is worth, and where treating one helps."""

from __future__ import annotations

from murmesh.plugin.describe import band_words, signed
from murmesh.plugin.pictures.contribution_bars import figure
from murmesh.plugin.pictures.style import look
from murmesh.plugin.report.html import Html, join, not_computed, note, picture, table, tag
from murmesh.plugin.report.review import Review
from murmesh.plugin.summary import shown
from murmesh.solver.contribution import Ranking, rank
from murmesh.solver.errors import ResultError
from murmesh.solver.result import Result

TITLE = "Quieten: which panel is heard"


def section(review: Review) -> Html:
    """Per load case a table over all receivers and the chart."""
    return join(_load_case(review.result, held.name) for held in review.result.load_cases)


def _load_case(result: Result, name: str) -> Html:
    heading = tag("h3", f"Load case {name}")
    try:
        found = rank(result, [], load_case=name)
        with look():
            chart = picture(figure(result, load_case=name), f"Contribution of the panels, load case {name}")
    except ResultError as problem:
        return join([heading, not_computed(str(problem))])
    return join([heading, _table(found), note(found.words, " ", _total(found)), chart])


def _table(found: Ranking) -> Html:
    header = ("panel", "if it were silent", "share of the mean square", "alone [dB(A)]", "change if silent [dB]")
    rows = [
        (row.panel, _meaning(row.removal_db), signed(100 * row.share, " %"), shown(row.own_db), signed(row.removal_db))
        for row in found.rows
    ]
    return table(header, rows, words=2)


def _meaning(change: float) -> str:
    return "louder" if change > 0.05 else "quieter" if change < -0.05 else "no change"


def _total(found: Ranking) -> str:
    return (
        f"Mean square over {', '.join(found.receivers)}, {band_words(found.band)}, {found.weighting}-weighted. "
        f"Shares add up to {100 * sum(row.share for row in found.rows):.4f} %. Negative: the panel makes it quieter."
    )
