"""The treatment study of a result: what quietening and what treating every panel would bring, and the choice, verified.

Two rankings that are never mixed. *Quieten*: the panel's velocity lowered by `QUIETER` dB, as a stiffener or an isolated mount
might. *Treat*: each treatment of the catalogue on each panel it may go on. The top contributor is rarely where an absorber
belongs, so the second ranking is a new solution for every entry.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from murmesh.plugin.check import check_catalogue
from murmesh.plugin.files import written
from murmesh.plugin.findings.finding import Finding
from murmesh.plugin.summary import CAUTIONS, Levels, levels
from murmesh.solver.case.catalogue import Limits, Ranges, Treatment
from murmesh.solver.case.model import Case
from murmesh.solver.choice import Candidate, Choice, choose
from murmesh.solver.contribution import rank
from murmesh.solver.levels import Band, level
from murmesh.solver.result import Result
from murmesh.solver.treatment import Goal, Option, Verification, verified
from murmesh.solver.uncertainty import Act, Spread, spread
from murmesh.solver.whatif import Change, WhatIf

Floats = npt.NDArray[np.float64]
QUIETER = 6.0
"""dB by which the ranking *quieten* lowers the velocity of a panel."""
LOUDER = -0.005
"""Gain [dB] below which a measure is marked as making it louder."""
VERIFIED = 3
"""How many of the best sets are solved again in full."""


@dataclass(frozen=True)
class Measure:
    """One entry of a ranking: gain [dB], over all and per third octave (nan where nothing is heard), mass [kg] and cost [EUR]
    (0 for quietening, whose price nobody has given); where what is not known was sampled, between which gains [dB] and which
    places of its ranking the middle 80 % of the draws put it."""

    name: str
    panel: str
    gain: float
    bands: tuple[tuple[Band, float], ...]
    mass: float = 0.0
    cost: float = 0.0
    treatment: str = ""
    spread: tuple[float, float] | None = None
    places: tuple[int, int] | None = None
    caution: str = ""
    """What speaks against believing or doing it: who hears it louder, what the check says of the treatment's law."""

    @property
    def louder(self) -> bool:
        """Whether it makes the goal louder."""
        return self.gain < LOUDER


@dataclass(frozen=True, eq=False)
class Study:
    """Baseline level [dB], both rankings best first, the choice, its verification, and what is needed for pictures."""

    result: Result
    whatif: WhatIf
    goal: Goal
    level: float
    quieten: tuple[Measure, ...]
    treat: tuple[Measure, ...]
    limits: Limits
    choice: Choice
    verified: tuple[Verification, ...]
    top_contributor: str
    spread: Spread | None = None
    """Of the best choices, at most `VERIFIED` of them."""

    @property
    def best(self) -> Candidate:
        """The choice."""
        return self.choice.candidates[0]

    def used(self, candidate: Candidate) -> tuple[Option, ...]:
        """The options of a candidate."""
        return tuple(self.whatif.options[i] for i in candidate.chosen)

    def stays_first(self) -> float:
        """How often the choice stays first among those that were verified, 0 to 1; 1 without samples."""
        return 1.0 if self.spread is None else self.spread.stays_first()

    def band(self, number: int) -> tuple[float, float] | None:
        """The middle 80 % of the gains [dB] of one of the first choices where it was sampled."""
        return None if self.spread is None or number >= self.spread.gains.shape[1] else self.spread.band(number)

    @property
    def before_after(self) -> tuple[tuple[Levels, Levels], ...]:
        """Levels of every receiver of the goal as it is and with the choice: solved in full, predicted without that."""
        case, goal = self.result.case, self.goal
        predicted = self.whatif.mean_squares(self.best.chosen, goal.load_case)
        pairs = []
        for name in _receivers(case, goal):
            after = predicted[self.result.receiver(name)]
            if self.verified:
                after = self.verified[0].result.mean_square(name, goal.load_case)
            head = self.result, name, goal.load_case, goal.weighting
            pairs.append((levels(*head), levels(*head, after)))
        return tuple(pairs)

    @property
    def words(self) -> str:
        """Whether the top contributor is where the absorber goes."""
        absorbers = {t.name for t in self.result.case.catalogue if t.wall is not None}
        treated = [option.panel for option in self.used(self.best) if option.treatment in absorbers]
        if not treated:
            return f"The top contributor is {self.top_contributor}; no absorber is chosen."
        where = "an absorber goes there" if self.top_contributor in treated else f"absorbers go on {', '.join(treated)}"
        return f"The top contributor is {self.top_contributor}; {where}."


def study(
    result: Result,
    goal: Goal = Goal(),  # noqa: B008 - frozen
    limits: Limits | None = None,
    *,
    verify: bool = True,
    samples: int = 0,
    report: Callable[[str], None] = lambda words: None,
) -> Study:
    """Rank, choose within `limits` (None: those of the case) and verify; `samples` draws of what is not known give the spread
    of the gains of the best choices, and spread and places of every entry of the rankings.

    Raises: ResultError without a reduced model, CaseError where nothing can be chosen, SolveError where a verified gain
    disagrees with the prediction.
    """
    whatif = WhatIf.build(result, report=report)
    report(f"{len(whatif.options)} options")
    treat = [
        _measured(whatif, goal, option.name, option.panel, [whatif.changes[i]], option.mass, option.cost, option.treatment)
        for i, option in enumerate(whatif.options)
    ]
    quieten = [_measured(whatif, goal, panel, panel, [whatif.change(*_quieter(panel))]) for panel in result.case.panels]
    kept = limits or result.case.limits
    choice = choose(whatif.options, kept, lambda chosen: whatif.energy(whatif.mean_squares(chosen, goal.load_case), goal))
    report(choice.how)
    checked = []
    for number, candidate in enumerate(choice.candidates[:VERIFIED] if verify else ()):
        report(f"solving choice {number + 1} again in full")
        chosen = [whatif.options[i] for i in candidate.chosen]
        checked.append(verified(result, chosen, goal, candidate.gain))
    drawn = None
    if samples:
        sets = [[whatif.act(i) for i in candidate.chosen] for candidate in choice.candidates[:VERIFIED]]
        singles = [[whatif.act(i)] for i in range(len(treat))]
        found = spread(whatif, [*sets, *singles, *([_quieter(m.panel)] for m in quieten)], goal, result.case.ranges, samples,
                       report=report)  # fmt: skip
        ends = np.cumsum([0, len(sets), len(treat), len(quieten)])
        of_sets, of_treat, of_quieten = (slice(int(a), int(b)) for a, b in pairwise(ends))
        treat, quieten = _spread_out(treat, found, of_treat), _spread_out(quieten, found, of_quieten)
        drawn = replace(found, gains=found.gains[:, of_sets])
    by_gain = lambda measure: -measure.gain  # noqa: E731
    top = rank(result, goal.receivers, goal.band, goal.weighting, goal.load_case).rows[0].panel
    bare = float(level(whatif.energy(whatif.mean_squares((), goal.load_case), goal) / len(_receivers(result.case, goal))))
    return Study(
        result, whatif, goal, bare, tuple(sorted(quieten, key=by_gain)), tuple(sorted(treat, key=by_gain)), kept, choice,
        tuple(checked), top, drawn,
    )  # fmt: skip


def untreated(case: Case) -> Case:
    """The case without catalogue, limits and ranges: what a solution depends on."""
    return case.with_(catalogue=(), limits=Limits(), ranges=Ranges())


def _receivers(case: Case, goal: Goal) -> tuple[str, ...]:
    return goal.receivers or tuple(receiver.name for receiver in case.receivers)


def _quieter(panel: str) -> Act:
    """The panel with its velocity lowered and nothing else changed."""
    return Treatment(f"{QUIETER:g} dB", 0.0, 0.0, velocity_cut=QUIETER), panel


def _spread_out(measures: Sequence[Measure], found: Spread, columns: slice) -> list[Measure]:
    """The measures with what the draws say of them."""
    places = found.places(columns)
    return [
        replace(m, spread=found.band(columns.start + i), places=places[i]) for i, m in enumerate(measures)
    ]  # fmt: skip


def _measured(whatif: WhatIf, goal: Goal, name: str, panel: str, changes: Sequence[Change], *more: Any) -> Measure:
    before, after = (whatif.squares(held, goal.load_case) for held in ((), changes))
    gain = float(level(whatif.energy(before, goal)) - level(whatif.energy(after, goal)))
    measure = Measure(name, panel, gain, whatif.band_gains(before, after, goal), *more)
    return replace(measure, caution=_caution(whatif, goal, measure, before, after))


def _caution(whatif: WhatIf, goal: Goal, measure: Measure, before: Floats, after: Floats) -> str:
    """`louder`, or at which of several receivers; and what the check of the catalogue finds."""
    words = ["louder"] if measure.louder else []
    for receiver in _receivers(whatif.case, goal) if not measure.louder else ():
        alone = replace(goal, receivers=(receiver,))
        if level(whatif.energy(before, alone)) - level(whatif.energy(after, alone)) < LOUDER:
            words.append(f"louder at {receiver}")
    found = [item for item in _law_findings(whatif) if item.subject == measure.treatment and item.severity != "note"]
    return "; ".join([*words, *dict.fromkeys(item.code.replace("_", " ") for item in found)])


@lru_cache(maxsize=4)
def _law_findings(whatif: WhatIf) -> tuple[Finding, ...]:
    return check_catalogue(whatif.case)


# ---------------------------------------------------------------------------------------------------------------------
# as a tree, for scripts and for the page of a review


def tree(found: Study) -> dict[str, Any]:
    """Everything a table or a page shows, as plain numbers and texts."""
    goal = found.goal
    return {
        "case_checksum": found.result.case.checksum,
        "untreated_checksum": untreated(found.result.case).checksum,
        "goal": {
            "receivers": list(_receivers(found.result.case, goal)),
            "load_case": found.result.load_case(goal.load_case).name,
            "band_hz": list(goal.band or (float(found.result.frequencies[0]), float(found.result.frequencies[-1]))),
            "weighting": goal.weighting,
        },
        "baseline_level_db": round(found.level, 3),
        "quieten": [
            {"panel": m.panel, "cut_db": QUIETER, "gain_db": round(m.gain, 4), "louder": m.louder, "caution": m.caution,
             **_drawn(m), "third_octaves": _bands(m)}
            for m in found.quieten
        ],
        "treat": [_measure(m) for m in found.treat],
        "limits": {k: v for k, v in vars(found.limits).items() if v not in (None, ())},
        "how": found.choice.how,
        "choices": [_candidate(found, i) for i in range(min(10, len(found.choice.candidates)))],
        "front": [
            {"gain_db": round(c.gain, 4), "mass_kg": round(c.mass, 3), "cost_eur": round(c.cost, 2),
             "measures": [o.name for o in found.used(c)]}
            for c in found.choice.front
        ],
        "samples": 0 if found.spread is None else len(found.spread.gains),
        "choice_stays_first": round(found.stays_first(), 3),
        "baseline_80_percent_db": None if found.spread is None else [round(v, 2) for v in found.spread.level_band],
        "before_after": [_pair(before, after) for before, after in found.before_after],
        "before_after_is": "solved in full" if found.verified else "predicted",
        "top_contributor": found.top_contributor,
        "words": found.words,
        "cautions": CAUTIONS,
    }  # fmt: skip


def _measure(measure: Measure) -> dict[str, Any]:
    return {
        "measure": measure.name,
        "panel": measure.panel,
        "gain_db": round(measure.gain, 4),
        "mass_kg": round(measure.mass, 3),
        "cost_eur": round(measure.cost, 2),
        "gain_per_kg": round(measure.gain / measure.mass, 4) if measure.mass > 0 else None,
        "gain_per_eur": round(measure.gain / measure.cost, 5) if measure.cost > 0 else None,
        "louder": measure.louder,
        "caution": measure.caution,
        **_drawn(measure),
        "third_octaves": _bands(measure),
    }


def _drawn(measure: Measure) -> dict[str, Any]:
    """The middle 80 % of the draws; null without samples."""
    gains = None if measure.spread is None else [round(v, 3) for v in measure.spread]
    return {"gain_80_percent_db": gains, "places_80_percent": measure.places}


def _bands(measure: Measure) -> list[dict[str, Any]]:
    return [
        {"band_hz": float(band.nominal), "gain_db": round(gain, 3) if np.isfinite(gain) else None}
        for band, gain in measure.bands
    ]


def _pair(before: Levels, after: Levels) -> dict[str, Any]:
    bands = zip(before.bands, before.band_levels.tolist(), after.band_levels.tolist(), strict=True)
    return {
        "receiver": before.receiver,
        "unit": before.unit,
        "before_db": _level(before.overall),
        "after_db": _level(after.overall),
        "third_octaves": [
            {"band_hz": float(band.nominal), "before_db": _level(old), "after_db": _level(new)} for band, old, new in bands
        ],
    }


def _level(value: float) -> float | None:
    return round(value, 2) if np.isfinite(value) else None


def _candidate(found: Study, index: int) -> dict[str, Any]:
    candidate = found.choice.candidates[index]
    checked = found.verified[index] if index < len(found.verified) else None
    return {
        "measures": [option.name for option in found.used(candidate)],
        "predicted_gain_db": round(candidate.gain, 4),
        "verified_gain_db": None if checked is None else round(checked.gain, 4),
        "gain_80_percent_db": None if (band := found.band(index)) is None else [round(v, 3) for v in band],
        "mass_kg": round(candidate.mass, 3),
        "cost_eur": round(candidate.cost, 2),
    }


def write_study(found: Study, path: str | Path) -> Path:
    """Write the study's tree as JSON."""
    with written(Path(path)) as scratch:
        scratch.write_text(json.dumps(tree(found), indent=1) + "\n", encoding="utf-8")
    return Path(path)
