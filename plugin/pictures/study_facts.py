"""What the pictures of a treatment study say above themselves."""

from __future__ import annotations

from murmesh.plugin.describe import WEIGHTING, band_words, level_unit, load_case_words, names
from murmesh.plugin.study import Study


def goal_facts(study: Study) -> list[str]:
    """Receivers, band, weighting, baseline level and load case."""
    goal, result = study.goal, study.result
    listed = goal.receivers or tuple(receiver.name for receiver in result.case.receivers)
    band = goal.band or (float(result.frequencies[0]), float(result.frequencies[-1]))
    return [
        f"mean over {names(listed)} · {band_words(band)} · {WEIGHTING[goal.weighting]} · as it is "
        f"{study.level:.1f} {level_unit(goal.weighting)}",
        load_case_words(result.load_case_of(goal.load_case)),
    ]
