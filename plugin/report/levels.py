"""Levels per ear against the target, in third octaves, with the error bars of the mesh."""

from __future__ import annotations

import numpy as np

from murmesh.plugin.pictures.receiver_spectrum import figure
from murmesh.plugin.pictures.style import look
from murmesh.plugin.report.html import Html, join, not_computed, note, picture, table, tag
from murmesh.plugin.report.review import Review, verdict
from murmesh.plugin.summary import PARTIAL, Levels, all_levels, shown, trust
from murmesh.solver.result import Result

TITLE = "Levels at the receivers"


def section(review: Review) -> Html:
    """A table and a chart per load case."""
    result = review.result
    if not result.case.receivers or not result.load_cases:
        return not_computed("The case has no receiver or no load case.")
    parts = [_load_case(review, held.name) for held in result.load_cases]
    return join([*parts, note(trust(result)) if trust(result) else ""])


def _load_case(review: Review, name: str) -> Html:
    found = all_levels(review.result, load_case=name)
    rows = [("overall", *(shown(item.overall, item.bars.overall if item.bars else np.nan) for item in found))]
    if found[0].bars:
        rows.append(("overall, corrected", *(shown(i.bars.corrected_overall if i.bars else np.nan) for i in found)))
    if review.target is not None:
        target = review.target
        rows.append((f"target {target:g} dB(A)", *(verdict(item, target) for item in found)))
    rows += [(_band_name(found[0], i), *(_cell(item, i) for item in found)) for i in range(len(found[0].bands))]
    body = table(("", *(item.heading for item in found)), rows, caption=f"{found[0].unit}, third octaves")
    return join([tag("h3", f"Load case {name} ({found[0].spectrum})"), body, _chart(review.result, name)])


def _band_name(item: Levels, index: int) -> str:
    partial = item.spectrum == "density" and item.coverage[index] < PARTIAL
    return f"{item.bands[index].nominal} Hz{' (partly swept)' if partial else ''}"


def _cell(item: Levels, index: int) -> str:
    return shown(float(item.band_levels[index]), float(item.bars.bands[index]) if item.bars else float("nan"))


def _chart(result: Result, load_case: str) -> Html:
    with look():
        drawn = figure(result, load_case=load_case)
    return picture(drawn, f"Levels at the receivers, load case {load_case}: narrow band, and third octaves")
