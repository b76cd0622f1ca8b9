"""Receiver spectra: the narrow-band level beside its third octaves, one row per receiver, measured levels laid over."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from murmesh.plugin.describe import (
    CONVENTION,
    WEIGHTING,
    band_words,
    is_density,
    level_unit,
    load_case_words,
    number,
    origin,
)
from murmesh.plugin.fields import listed_receivers
from murmesh.plugin.pictures import PICTURES
from murmesh.plugin.pictures.style import ACCENT, INK, LINES, Page, frequency_axis, look, page, save
from murmesh.plugin.summary import PARTIAL, Levels, levels, shown
from murmesh.solver.case.model import Measured, Receiver
from murmesh.solver.levels import level
from murmesh.solver.levels import weighting as weighting_db
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]
RANGE = 60.0
_ROW, _HEADING, _UNDER = 2.75, 0.42, 0.72  # inches: axes, room above and below them
_MOST_LABELS = 16


@PICTURES.member("receiver_spectrum", ".png", "narrow-band and third-octave levels per receiver")
def draw(
    result: Result,
    path: Path,
    *,
    receivers: tuple[str, ...] = (),
    load_case: str = "",
    weighting: str = "A",
    limits: tuple[float, float] | None = None,
) -> Path:
    """Draw the spectra at `receivers` (none: all); `limits` [dB] hold for the narrow-band levels."""
    with look():
        return save(figure(result, receivers, load_case, weighting, limits), path)


def figure(
    result: Result,
    receivers: Sequence[str] = (),
    load_case: str = "",
    weighting: str = "A",
    limits: tuple[float, float] | None = None,
) -> Figure:
    """The figure, for further work."""
    listed = listed_receivers(result, receivers)
    chosen = [result.case.receivers[result.receiver(name)] for name in listed]
    found = [levels(result, name, load_case, weighting) for name in listed]
    case = result.load_case_of(load_case)
    span = float(result.frequencies[0]), float(result.frequencies[-1])
    facts = [
        f"{band_words(span)} · {load_case_words(case)}",
        f"{WEIGHTING[weighting]}, also where a measured spectrum is laid over"
        if any(r.measured for r in chosen)
        else WEIGHTING[weighting],
    ]
    notes = [f"Convention: {CONVENTION}.", *_partial_note(found), *_bar_note(found), f"{origin(result)}."]
    sheet = page("Sound pressure level at the receivers", facts, notes, len(found) * (_HEADING + _ROW + _UNDER))
    curves = [np.asarray(level(result.mean_square(item.receiver, load_case))) for item in found]
    curves = [curve + weighting_db(weighting, result.frequencies) for curve in curves]
    measured = [_weighted(r.measured, weighting) for r in chosen if r.measured]
    scale = limits or _scale(np.concatenate([*curves, *measured]), RANGE)
    bars = _scale(np.concatenate([item.band_levels for item in found]), 50.0)
    for i, (item, curve, receiver) in enumerate(zip(found, curves, chosen, strict=True)):
        up = (len(found) - 1 - i) * (_HEADING + _ROW + _UNDER) + _UNDER
        _narrow(sheet, up, result, receiver, curve, scale, item, is_density(result, load_case))
        _bands(sheet, up, item, bars)
    return sheet.figure


def _partial_note(found: list[Levels]) -> list[str]:
    partial = any(_is_partial(item, i) for item in found for i in range(len(item.bands)))
    return ["Hatched bands lie only partly inside the sweep: the true band level is higher."] if partial else []


def _bar_note(found: list[Levels]) -> list[str]:
    return ["± is the error bar of the mesh, from elements of the next order."] if any(item.bars for item in found) else []


def _is_partial(item: Levels, index: int) -> bool:
    return item.spectrum == "density" and bool(item.coverage[index] < PARTIAL)


def _scale(values: Floats, extent: float) -> tuple[float, float]:
    finite = values[np.isfinite(values)]
    top = 5.0 * np.ceil((float(finite.max()) if len(finite) else 0.0) / 5.0) + 5.0
    return top - extent, top


def _narrow(
    sheet: Page,
    up: float,
    result: Result,
    receiver: Receiver,
    curve: Floats,
    scale: tuple[float, float],
    item: Levels,
    density: bool,
) -> None:
    axes = sheet.axes(0.85, up, 6.15, _ROW)
    f = result.frequencies
    colour, _ = LINES[0]
    name = "computed"
    if density:
        axes.plot(f, curve, color=colour, linewidth=1.5, label=name)
    else:
        heard = np.isfinite(curve)
        axes.vlines(f[heard], scale[0], curve[heard], color=colour, linewidth=1.8)
        axes.plot(f[heard], curve[heard], "o", color=colour, markersize=4.5, label=name)
        if heard.sum() <= _MOST_LABELS:
            _label_tones(axes, f[heard], curve[heard], scale)
    if receiver.measured is not None:
        axes.plot(
            receiver.measured.frequencies,
            _weighted(receiver.measured, item.weighting),
            color=ACCENT,
            linestyle=(0, (5, 2)),
            linewidth=1.3,
            label="measured",
        )
        axes.legend(loc="upper right", ncols=2, bbox_to_anchor=(1.0, 1.15), borderaxespad=0.0)
    low, high = (float(f[0]), float(f[-1])) if len(f) > 1 else (0.8 * float(f[0]), 1.25 * float(f[0]))
    pad = 1.0 if density else 1.04
    frequency_axis(axes, low / pad, high * pad)
    axes.set_ylim(*scale)
    axes.grid(True, axis="both")
    axes.set_axisbelow(True)
    axes.set_xlabel("frequency [Hz]")
    axes.set_ylabel(f"level [{level_unit(item.weighting, density, item.power)}]", fontsize=9.5)
    axes.set_title(item.receiver, loc="left", fontweight="bold", fontsize=12)


def _weighted(measured: Measured, weighting: str) -> Floats:
    return measured.levels + weighting_db(weighting, measured.frequencies)


def _label_tones(axes: Axes, f: Floats, curve: Floats, scale: tuple[float, float]) -> None:
    for x, y in zip(f, curve, strict=True):
        if scale[0] < y < scale[1] - 5:
            axes.annotate(number(float(y)), (x, y), (0, 6), textcoords="offset points", rotation=90, ha="center",
                          va="bottom", fontsize=8.5, color=INK)  # fmt: skip


def _bands(sheet: Page, up: float, item: Levels, scale: tuple[float, float]) -> None:
    axes = sheet.axes(8.0, up, sheet.width - 8.0, _ROW)
    for i, value in enumerate(item.band_levels):
        visible = bool(np.isfinite(value)) and value > scale[0]
        partial = _is_partial(item, i)
        if visible:
            axes.bar(i, value - scale[0], 0.82, bottom=scale[0], facecolor="white" if partial else "#8fa9c0",
                     edgecolor=LINES[0][0], hatch="////" if partial else "", linewidth=0.9)  # fmt: skip
        axes.annotate(number(float(value)), (i, value if visible else scale[0]), (0, 3), textcoords="offset points",
                      ha="center", va="bottom", fontsize=8.5, rotation=90 if len(item.bands) > 12 else 0)  # fmt: skip
    axes.set_xticks(range(len(item.bands)), [band.nominal for band in item.bands], fontsize=9)
    axes.set_xlim(-0.6, len(item.bands) - 0.4)
    axes.set_ylim(*scale)
    axes.grid(True, axis="y")
    axes.set_axisbelow(True)
    axes.set_xlabel("third octave [Hz]")
    axes.set_ylabel(f"band level [{level_unit(item.weighting, power=item.power)}]", fontsize=9.5)
    bar = item.bars.overall if item.bars else float("nan")
    overall = f"overall {shown(item.overall, bar)} {level_unit(item.weighting).split(' re ')[0]}, inside the sweep"
    axes.set_title(overall, loc="left", fontsize=11)
