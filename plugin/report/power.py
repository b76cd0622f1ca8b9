"""Who puts sound power in, and who takes it."""

from __future__ import annotations

from murmesh.plugin.balance import MEANING, balance
from murmesh.plugin.describe import number, signed
from murmesh.plugin.report.html import Html, join, not_computed, note, table, tag
from murmesh.plugin.report.review import Review
from murmesh.solver.levels import power_level
from murmesh.solver.result import Result

TITLE = "Power balance"


def section(review: Review) -> Html:
    """A table per load case over the whole sweep."""
    held = review.result.load_cases
    return join(_load_case(review.result, case.name) for case in held) if held else not_computed("No load case.")


def _load_case(result: Result, name: str) -> Html:
    found = balance(result, load_case=name)
    rows = [(label.replace("- ", "− ", 1), f"{w:.3g}", _level(w), _share(w, found.total)) for label, w in found.rows]
    body = table(("put in (+), taken (−)", "power [W]", "level [dB re 1 pW]", "of the input"), rows)
    remark = f"Imbalance: {found.imbalance:.0e} of the input. {MEANING}"
    return join([tag("h3", f"Load case {name}"), body, note(remark)])


def _level(power: float) -> str:
    return number(float(power_level(power))) if power > 0 else "–"


def _share(power: float, total: float) -> str:
    return signed(100 * power / total, " %") if total else "–"
