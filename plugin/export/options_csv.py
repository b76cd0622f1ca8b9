"""The option table of a treatment study as CSV: both rankings and the choices."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

from murmesh.plugin.export import EXPORTS
from murmesh.plugin.export.tables import decibels, write_table
from murmesh.plugin.study import LOUDER, QUIETER, Study
from murmesh.plugin.summary import CAUTIONS
from murmesh.solver.choice import Candidate

DRAWN = ("gain_low_db", "gain_high_db", "place_low", "place_high")
COLUMNS = (
    "table", "measure", "gain_db", "verified_db", *DRAWN, "mass_kg", "cost_eur", "gain_per_kg", "gain_per_eur", "louder",
    "caution",
)  # fmt: skip
REMARKS = (
    f"quieten: the panel's velocity lowered by {QUIETER:g} dB; treat: one treatment on one panel; choice: sets within limits",
    "gain_db: level before less level after, positive is quieter; verified_db: from a full solution with the set in place",
    "gain_low_db, gain_high_db, place_low, place_high: the middle 80 % of the draws of what is not known; empty without draws",
    "caution: who hears it louder, and what the check says of the law",
    "louder: yes where the level rises; gain_..._hz_db: per third octave, empty where nothing is heard",
    CAUTIONS,
)


@EXPORTS.member(
    "options_csv", ".csv", "gains of quietening, treatments and choices, over all and per third octave", source="study"
)
def write(study: Study, path: Path) -> Path:
    """Write one row per measure and per choice."""
    bands = tuple(f"gain_{band.nominal}_hz_db" for band, _ in study.treat[0].bands)
    return write_table(study.result, path, REMARKS, (*COLUMNS, *bands), _rows(study))


def _rows(study: Study) -> Iterator[tuple[str, ...]]:
    for name, measures in (("quieten", study.quieten), ("treat", study.treat)):
        for m in measures:
            yield (name, m.name, decibels(m.gain), "", *_drawn(m.spread, m.places),
                   *_amounts(m.gain, m.mass, m.cost), "yes" if m.louder else "", m.caution,
                   *(decibels(gain) for _, gain in m.bands))  # fmt: skip
    for number, candidate in enumerate(study.choice.candidates[:10]):
        checked = decibels(study.verified[number].gain) if number < len(study.verified) else ""
        names = " + ".join(option.name for option in study.used(candidate)) or "nothing"
        bands = study.whatif.gains_by_band(candidate.chosen, study.goal)
        yield ("choice", names, decibels(candidate.gain), checked, *_drawn(study.band(number)),
               *_amounts(candidate.gain, candidate.mass, candidate.cost), "yes" if candidate.gain < LOUDER else "",
               _cautions(study, candidate),
               *(decibels(gain) for _, gain in bands))  # fmt: skip


def _cautions(study: Study, candidate: Candidate) -> str:
    """What is said of the measures of a set."""
    names = {option.name for option in study.used(candidate)}
    return "; ".join(dict.fromkeys(f"{m.name}: {m.caution}" for m in study.treat if m.name in names and m.caution))


def _drawn(gains: tuple[float, float] | None, places: tuple[int, int] | None = None) -> tuple[str, ...]:
    """What the draws say, in four columns."""
    return *(("", "") if gains is None else map(decibels, gains)), *(("", "") if places is None else map(str, places))


def _amounts(gain: float, mass: float, cost: float) -> tuple[str, ...]:
    """Mass, cost, and the gain per each; empty where there is none, as for quietening."""
    return f"{mass:.3f}", f"{cost:.2f}", f"{gain / mass:.3f}" if mass > 0 else "", f"{gain / cost:.4f}" if cost > 0 else ""
