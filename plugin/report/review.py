"""What a page is about: a result, the question, the target, and the lines to look at."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from murmesh.plugin.describe import names
from murmesh.plugin.summary import Levels
from murmesh.solver.errors import ResultError
from murmesh.solver.levels import A_weighting
from murmesh.solver.result import Result

APART = 2 ** (1 / 3)
"""Ratio of frequencies by which two of the worst lines differ at least: a third of an octave."""


@dataclass(frozen=True, eq=False)
class Review:
    """A result to be judged. `target` is an overall A-weighted level [dB(A)]; `load_case` is the one on the maps."""

    result: Result
    question: str = ""
    target: float | None = None
    load_case: str = ""

    def __post_init__(self) -> None:
        if self.target is not None and not np.isfinite(self.target):
            raise ResultError(f"a target of {self.target} is no level; give dB(A), for instance 78")
        self.result.load_case(self.load_case)

    @property
    def asked(self) -> str:
        """The question in words."""
        if self.question:
            return self.question
        heard = names(receiver.name for receiver in self.result.case.receivers) or "the receivers"
        aim = f", and is it at most {self.target:g} dB(A)?" if self.target is not None else "?"
        return f"How loud is it at {heard}, which panels make the sound{aim}"


def worst_lines(result: Result, load_case: str = "", count: int = 3) -> list[float]:
    """Lines with a field that are loudest at the receivers, A-weighted, at least a third of an octave apart; loudest first.

    Empty where the result keeps no field.
    """
    lines = result.frequencies if result.model is not None else result.field_frequencies
    if not len(lines):
        return []
    heard = np.ones(len(lines))
    if result.case.receivers:
        squares = sum(result.mean_square(receiver.name, load_case) for receiver in result.case.receivers)
        heard = np.interp(lines, result.frequencies, np.asarray(squares)) * 10 ** (np.asarray(A_weighting(lines)) / 10)
    chosen: list[float] = []
    for i in np.argsort(-heard, kind="stable"):
        f = float(lines[i])
        if len(chosen) < count and heard[i] > 0 and all(max(f / g, g / f) >= APART for g in chosen):
            chosen.append(f)
    return chosen


def verdict(item: Levels, target: float) -> str:
    """The overall level against the target; undecided where the mesh's error bar reaches across it."""
    if item.power:
        return "no level at a receiver"
    gap, bar = item.overall - target, item.bars.overall if item.bars else 0.0
    if not np.isfinite(item.overall):
        return "silent: met"
    if abs(gap) <= bar:
        return f"undecided: {gap:+.1f} dB, within the mesh's ±{max(bar, 0.1):.1f} dB"
    return f"NOT met: {gap:.1f} dB above" if gap > 0 else f"met: {-gap:.1f} dB below"
