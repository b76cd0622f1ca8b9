"""Contributions as CSV: every panel's complex pressure at every receiver and frequency, and its part of the whole."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import numpy as np

from murmesh.plugin.export import EXPORTS
from murmesh.plugin.export.tables import chosen, decibels, quantity, write_table
from murmesh.solver.contribution import QUIETENING, participation
from murmesh.solver.levels import level
from murmesh.solver.result import Result

COLUMNS = (
    "load_case", "receiver", "frequency_hz", "panel", "p_re_pa", "p_im_pa", "share_pa2", "share_percent", "alone_db",
    "if_silent_db",
)  # fmt: skip
REMARKS = (
    "p_re_pa, p_im_pa: complex peak pressure of the panel at the receiver's centre",
    "share_pa2 (per hertz for a density): the panel's part of the mean square over the receiver's sphere, negative where "
    "it quietens; the shares add up to the total",
    "alone_db: level of the panel alone, dB re 20 uPa, unweighted; if_silent_db: change of level if it were silent",
    QUIETENING,
)


@EXPORTS.member("contributions_csv", ".csv", "complex contribution and share of every panel per receiver and frequency")
def write(result: Result, path: Path, *, receivers: tuple[str, ...] = (), load_case: str = "") -> Path:
    """Write one row per load case, receiver, frequency with sound and panel."""
    return write_table(result, path, REMARKS, COLUMNS, _rows(result, receivers, load_case))


def _rows(result: Result, receivers: tuple[str, ...], load_case: str) -> Iterator[tuple[str, ...]]:
    for case, receiver in chosen(result, receivers, load_case):
        part = participation(result, receiver, case)
        centre = result.load_case(case).contributions[:, result.samples(receiver)[0]]
        alone, share = level(part.own), 100 * part.signed
        for i in np.flatnonzero(part.total > 0):  # of tones only those that sound
            f, silent = part.frequencies[i], level(np.maximum(part.without[i], 0.0)) - level(part.total[i])
            for j, panel in enumerate(part.loads):
                pressure = quantity(centre[i, j].real), quantity(centre[i, j].imag), quantity(part.shares[i, j])
                levels = f"{share[i, j]:.2f}", decibels(alone[i, j]), decibels(silent[j])
                yield (case, receiver, f"{f:.9g}", panel, *pressure, *levels)
