"""The option table of a treatment study as CSV: both rankings and the choices."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

from murmesh.plugin.export import EXPORTS
from murmesh.plugin.export.tables import decibels, write_table
from murmesh.plugin.study import QUIETER, Study
from murmesh.plugin.summary import CAUTIONS

COLUMNS = ("table", "measure", "gain_db", "verified_db", "mass_kg", "cost_eur", "louder")
REMARKS = (
    f"quieten: the panel's velocity lowered by {QUIETER:g} dB; treat: one treatment on one panel; choice: sets within limits",
    "gain_db: level before less level after, positive is quieter; verified_db: from a full solution with the set in place",
    CAUTIONS,
)


@EXPORTS.member("options_csv", ".csv", "gains of quietening, treatments and choices", source="study")
def write(study: Study, path: Path) -> Path:
    """Write one row per measure and per choice."""
    return write_table(study.result, path, REMARKS, COLUMNS, _rows(study))


def _rows(study: Study) -> Iterator[tuple[str, ...]]:
    for name, measures in (("quieten", study.quieten), ("treat", study.treat)):
        for m in measures:
            yield name, m.name, decibels(m.gain), "", f"{m.mass:.3f}", f"{m.cost:.2f}", "yes" if m.louder else ""
    for number, candidate in enumerate(study.choice.candidates[:10]):
        checked = decibels(study.verified[number].gain) if number < len(study.verified) else ""
        names = " + ".join(option.name for option in study.used(candidate)) or "nothing"
        louder = "yes" if candidate.gain < 0 else ""
        yield "choice", names, decibels(candidate.gain), checked, f"{candidate.mass:.3f}", f"{candidate.cost:.2f}", louder
