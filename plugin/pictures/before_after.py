"""Third-octave levels per receiver before and after the chosen treatments, from a full solution where there is one."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from murmesh.plugin.describe import CONVENTION, level_unit, origin, signed
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.pictures.study_facts import goal_facts
from murmesh.plugin.pictures.style import LINES, look, page, save
from murmesh.plugin.study import Study
from murmesh.plugin.summary import Levels

_ROW = 2.7  # inches


@PICTURES.member("before_after", ".png", "third octaves before and after the chosen treatments", source="study")
def draw(study: Study, path: Path) -> Path:
    """Draw a row per receiver."""
    with look():
        return save(figure(study), path)


def figure(study: Study) -> Figure:
    """The figure, for further work."""
    pairs, how = study.before_after, "solved in full" if study.verified else "predicted, not solved again"
    gain = study.verified[0].gain if study.verified else study.best.gain
    chosen = " + ".join(option.name for option in study.used(study.best)) or "nothing"
    facts = [*goal_facts(study), f"with {chosen}: {signed(-gain, ' dB', digits=2)} ({how})"]
    notes = [
        "Numbers above the bars: change of the band's level. Gains are more credible than absolute levels.",
        f"Convention: {CONVENTION}. {origin(study.result)}.",
    ]
    sheet = page("Before and after the chosen treatments", facts, notes, _ROW * len(pairs))
    for i, (before, after) in enumerate(pairs):
        _bars(sheet.axes(0.85, _ROW * (len(pairs) - 1 - i) + 0.62, sheet.width - 0.9, _ROW - 1.05), before, after)
    return sheet.figure


def _bars(axes: Axes, before: Levels, after: Levels) -> None:
    both = np.concatenate([before.band_levels, after.band_levels])
    finite = both[np.isfinite(both)]
    top = 5 * np.ceil((float(finite.max()) if len(finite) else 0.0) / 5) + 5
    low = top - 50
    styles = (("before", "white", LINES[0][0], "////"), ("after", LINES[0][0], LINES[0][0], ""))
    for k, (item, (label, face, edge, hatch)) in enumerate(zip((before, after), styles, strict=True)):
        heights = np.where(np.isfinite(item.band_levels), np.maximum(item.band_levels - low, 0.0), 0.0)
        places = np.arange(len(heights)) + (k - 0.5) * 0.4
        axes.bar(places, heights, 0.38, bottom=low, facecolor=face, edgecolor=edge, hatch=hatch, linewidth=0.9, label=label)
    for i, (old, new) in enumerate(zip(before.band_levels, after.band_levels, strict=True)):
        if np.isfinite(old) and np.isfinite(new) and max(old, new) > low:
            axes.annotate(signed(float(new - old)), (i, max(old, new)), (0, 3), textcoords="offset points", ha="center",
                          fontsize=8.5)  # fmt: skip
    axes.set_xticks(range(len(before.bands)), [band.nominal for band in before.bands])
    axes.set_xlim(-0.6, len(before.bands) - 0.4)
    axes.set_ylim(low, top)
    axes.grid(True, axis="y")
    axes.set_axisbelow(True)
    axes.set_xlabel("third octave [Hz]")
    axes.set_ylabel(f"[{level_unit(before.weighting)}]", fontsize=9)
    change = signed(after.overall - before.overall, digits=2)
    axes.set_title(f"{before.receiver}: {before.overall:.1f} → {after.overall:.1f} ({change} dB)", loc="left", fontsize=11.5)
    axes.legend(loc="upper right", ncols=2, bbox_to_anchor=(1.0, 1.22), borderaxespad=0.0)
