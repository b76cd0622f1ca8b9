"""Treat: what quietening and what treating each panel would bring, never mixed, and the choice that was solved again in full.

All of it comes from the tree of a study (`study.tree`, the file that `murmesh treat` writes), so the page computes no gain.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from murmesh.plugin.describe import band_words, names, signed
from murmesh.plugin.report.html import Html, join, not_computed, note, table, tag
from murmesh.plugin.report.review import Review
from murmesh.plugin.study import untreated
from murmesh.solver.case.catalogue import Treatment
from murmesh.solver.errors import ResultError
from murmesh.solver.result import Result

TITLE = "Treat: what an absorber or a cut of velocity is worth"
Tree = dict[str, Any]
_LOUDER = -0.005  # dB
_UNITS = {"mass": " kg", "cost": " EUR", "thickness": " m", "wanted_gain": " dB"}
_MEANING = (
    "Gain: level before less level after, each from the field with the measure in place, one at a time: gains of several "
    "panels do not add up. Not modelled: the panel's own response to a treatment, and sound through it."
)
_WHY = (
    "The page was written without a study of treatments (`murmesh treat RESULT FOLDER`, then `murmesh report --study "
    "FOLDER/study.json`). A ranking by contribution does not say where an absorber helps."
)
_OTHER_CATALOGUE = (
    "The study had another catalogue, other limits or other ranges than the result file holds; model, loads and sweep are "
    "the same, so its gains hold. The result's catalogue is left out here."
)


def read_study(path: str | Path, result: Result) -> Tree:
    """The tree of a study of this case, whatever catalogue, limits and ranges the study had: a solution does not depend on
    them. Raises ResultError for another file, or a study of a case that differs in more.
    """
    try:
        tree = json.loads(Path(path).read_text(encoding="utf-8"))
        checksum, model = tree["case_checksum"], tree.get("untreated_checksum")
    except (OSError, ValueError, KeyError, TypeError) as problem:
        raise ResultError(f"{path}: this is no study ({problem}); make one with `murmesh treat RESULT FOLDER`") from None
    if checksum != result.case.checksum and model != untreated(result.case).checksum:
        raise ResultError(
            f"{path}: the study is of another case than the result (study {checksum[:8]}, result "
            f"{result.case.checksum[:8]}): mesh, surfaces, media, loads, receivers or sweep differ, so its gains would be "
            "wrong here; run `murmesh treat` on this result (`murmesh compare` of both results says what changed)"
        )
    return dict(tree)


def section(review: Review, found: Tree | None = None) -> Html:
    """Verified choice, both rankings and the catalogue; without a study, that nothing was computed."""
    try:
        parts = list(_answer(found)) if found else [not_computed(_WHY)]
    except (KeyError, TypeError, IndexError) as problem:
        raise ResultError(f"the study lacks {problem}; make it anew with `murmesh treat`") from None
    if found and found["case_checksum"] != review.result.case.checksum:
        return join([*parts, note(_OTHER_CATALOGUE)])
    catalogue = review.result.case.catalogue
    return join([*parts, tag("h3", "Catalogue"), _catalogue(catalogue)] if catalogue else parts)


def _answer(found: Tree) -> Iterator[Html]:
    goal, unit = found["goal"], f"dB({found['goal']['weighting']})"
    yield tag("p", tag("strong", found["words"]))
    place = f"{', '.join(goal['receivers'])}, load case {goal['load_case']}, {band_words(tuple(goal['band_hz']))}"
    yield note(f"At {place}; {found['baseline_level_db']:.1f} {unit} re 20 µPa without any measure. {_MEANING}")
    yield tag("h3", "Options: the best sets within the limits, and what a full solution says")
    drawn = ("80 % of the draws", "place") if found["samples"] else ()
    sets = ("set", f"predicted [{unit}]", f"verified [{unit}]", *drawn[:1], "mass [kg]", "cost [EUR]")
    yield table(sets, [_choice(item, len(drawn[:1])) for item in found["choices"]])
    yield note(f"Limits: {_limits(found['limits'])}. How the sets were found: {found['how']}. {_stability(found)}")
    yield tag("h3", "Quieten: the panel's velocity lowered, nothing else changed")
    rows = [
        (m["panel"], _gets(m["gain_db"]), f"{m['cut_db']:g}", signed(m["gain_db"]), *_drawn(m)[: len(drawn)])
        for m in found["quieten"]
    ]
    yield table(("panel", "it gets", "cut of velocity [dB]", f"gain [{unit}]", *drawn), rows, words=2)
    yield tag("h3", "Treat: each treatment where it may go")
    header = ("measure", "it gets", f"gain [{unit}]", *drawn, "mass [kg]", "cost [EUR]", "dB per kg", "dB per EUR", "caution")
    yield table(header, [_treated(item, len(drawn)) for item in found["treat"]], words=2)


def _choice(item: Tree, drawn: int) -> tuple[str, ...]:
    predicted, checked = item["predicted_gain_db"], item["verified_gain_db"]
    said = "not solved again" if checked is None else f"{signed(checked)} (off by {abs(predicted - checked):.3f})"
    what = " + ".join(item["measures"]) or "nothing"
    return what, signed(predicted), said, *_drawn(item)[:drawn], f"{item['mass_kg']:.1f}", f"{item['cost_eur']:.0f}"


def _treated(item: Tree, drawn: int) -> tuple[str, ...]:
    per = (
        "–" if item[key] is None else f"{item[key]:.{digits}f}" for key, digits in (("gain_per_kg", 2), ("gain_per_eur", 3))
    )
    head = item["measure"], _gets(item["gain_db"]), signed(item["gain_db"]), *_drawn(item)[:drawn]
    return *head, f"{item['mass_kg']:.1f}", f"{item['cost_eur']:.0f}", *per, item["caution"] or "–"


def _drawn(item: Tree) -> tuple[str, str]:
    """Gains and places of the middle 80 % of the draws."""
    gains, places = item["gain_80_percent_db"], item.get("places_80_percent")
    if gains is None:
        return "–", "–"
    low, high = places or ("–", "–")
    return f"{signed(gains[0])} … {signed(gains[1])}", f"{low}" if low == high else f"{low} to {high}"


def _stability(found: Tree) -> str:
    """What the draws say of the choice and of the level."""
    if not found["samples"]:
        return "What is not known exactly was not sampled."
    low, high = found["baseline_80_percent_db"]
    return (
        f"In {found['samples']} draws of what is not known exactly the first set stayed first of those solved again in "
        f"{100 * found['choice_stays_first']:.0f} %; the middle 80 % of the levels without any measure lie from {low:.1f} to "
        f"{high:.1f} dB."
    )


def _gets(gain: float) -> str:
    return "LOUDER" if gain < _LOUDER else "quieter" if gain > -_LOUDER else "no change"


def _limits(limits: Tree) -> str:
    return (
        names((f"{key.replace('_', ' ')} {_plain(value)}{_UNITS.get(key, '')}" for key, value in limits.items()), 9) or "none"
    )


def _plain(value: object) -> str:
    return ", ".join(str(item) for item in value) if isinstance(value, list | tuple) else str(value)


def _catalogue(catalogue: tuple[Treatment, ...]) -> Html:
    rows = [
        (t.name, names(t.panels), f"{t.mass_per_area:g}", f"{t.cost_per_area:g}", f"{1000 * t.thickness:g}") for t in catalogue
    ]
    return table(("treatment", "may go on", "mass [kg/m²]", "cost [EUR/m²]", "thickness [mm]"), rows, words=2)
