"""Question, target and the answer in one table."""

from __future__ import annotations

from murmesh.plugin.describe import band_words
from murmesh.plugin.report.html import Html, join, not_computed, note, table, tag
from murmesh.plugin.report.review import Review, verdict
from murmesh.plugin.summary import Levels, all_levels, shown
from murmesh.solver.contribution import rank
from murmesh.solver.errors import ResultError

TITLE = "Question and answer"


def section(review: Review) -> Html:
    """The question, the target, and per receiver the level, the verdict and the loudest panels."""
    result, target = review.result, review.target
    aim = f"at most {target:g} dB(A) overall at every receiver" if target is not None else "none was given"
    asked = [tag("p", tag("strong", "Question. "), review.asked), tag("p", tag("strong", "Target. "), aim)]
    if not result.case.receivers or not result.load_cases:
        return join([*asked, not_computed("The case has no receiver or no load case: nothing is heard.")])
    rows = [_row(review, item) for item in all_levels(result)]
    header = ("receiver", "load case", "against the target", "loudest panels, by share", "level [dB(A)]")
    span = band_words((float(result.frequencies[0]), float(result.frequencies[-1])))
    remark = f"A-weighted, rms re 20 µPa, {span} only: what lies outside the sweep would add to it. ± is the mesh's error bar."
    return join([*asked, table(header, rows, words=4), note(remark)])


def _row(review: Review, item: Levels) -> tuple[str, ...]:
    judged = verdict(item, review.target) if review.target is not None else "no target"
    bar = item.bars.overall if item.bars else float("nan")
    return item.heading, item.load_case, judged, _loudest(review, item.receiver, item.load_case), shown(item.overall, bar)


def _loudest(review: Review, receiver: str, load_case: str) -> str:
    try:
        rows = rank(review.result, [receiver], load_case=load_case).rows[:3]
    except ResultError:
        return "–"
    return ", ".join(f"{row.panel} {100 * row.share:.0f} %" for row in rows)
