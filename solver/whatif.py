"""What a set of treatments would do, in milliseconds, from tables made once.

A treatment on panel j changes its admittance by dY_j and its loads by a factor h_j,

    (A_0 + i w sum_j dY_j B_j) x = sum_l h_l f_l,

so that with the traces of `trace_tables` every combination is a small system and a correction of the pressure,

    (I + G D) a = sum_l h_l t_l,   p = sum_l h_l p_l - t_z^T D a,   D = diag(i w dY_j).

Exact where the trace bases span the new traces; `treatment.verified` solves a choice again in full.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.catalogue import Treatment
from murmesh.solver.case.load import SurfaceVelocity
from murmesh.solver.case.model import Case
from murmesh.solver.case.spectrum import as_spectrum
from murmesh.solver.errors import CaseError
from murmesh.solver.levels import Band, band_energy, level, third_octaves
from murmesh.solver.result import Result
from murmesh.solver.space import Side
from murmesh.solver.system import adjacent, side_admittance
from murmesh.solver.trace_tables import Response, TraceTables, trace_tables
from murmesh.solver.treatment import Goal, Option, goal_band, goal_rows, options, treated_boundary, treatment_called

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
HIDDEN = 1e-30
"""Part of a panel's motion that is nothing: single precision ends at 1e-38."""


@dataclass(frozen=True, eq=False)
class Wall:
    """A patch with a new wall: its number, and what the wall does in every band of lines."""

    patch: int
    responses: tuple[Response, ...]


@dataclass(frozen=True, eq=False)
class Change:
    """What an option does: new walls, and the factor (nf, loads) on the loads of every load case."""

    walls: tuple[Wall, ...]
    factors: tuple[Complex, ...]


@dataclass(frozen=True, eq=False)
class WhatIf:
    """Answers for one solved case; made by `build`."""

    case: Case
    frequencies: Floats
    options: tuple[Option, ...]
    tables: TraceTables
    mixes: tuple[Complex, ...]
    """Per load case: the loads' part (nf, loads, r) in the pressures whose mean squares add."""

    @classmethod
    def build(cls, result: Result, *, report: Callable[[str], None] = lambda words: None) -> WhatIf:
        """Tables of a result's case.

        Raises: CaseError where no panel can carry a treatment of the catalogue.
        """
        case, f = result.case, result.frequencies
        choices = options(case, result.space)
        if not choices:
            raise CaseError("the catalogue holds no treatment that any panel can carry; add one, or widen its panels")
        tables = trace_tables(result, choices, report)
        mixes = tuple(held.combination.factors(f, len(held.loads)) for held in case.load_cases)
        return cls(case, f, choices, tables, mixes)

    def damped(self, case: Case, report: Callable[[str], None] = lambda words: None) -> WhatIf:
        """The same questions to a case that differs in nothing but its residual damping."""
        return replace(self, case=case, tables=self.tables.retold(case, report))

    @cached_property
    def changes(self) -> tuple[Change, ...]:
        """What every option does, in their order."""
        return tuple(self.change(*self.act(number)) for number in range(len(self.options)))

    def act(self, number: int) -> tuple[Treatment, str]:
        """The treatment and the panel of an option."""
        option = self.options[number]
        return treatment_called(self.case, option.treatment), option.panel

    def change(self, treatment: Treatment, panel: str) -> Change:
        """What a treatment does on a panel; laws are asked, nothing is solved."""
        f, walls = self.frequencies, []
        for number, patch in enumerate(self.tables.patches):
            if patch.panel == panel and treatment.wall is not None:
                added = 2j * np.pi * f * self._added(patch.side, treatment)
                walls.append(Wall(number, tuple(band.response(number, added) for band in self.tables.bands)))
        drive = self._drive(panel, treatment) * 10 ** (-as_spectrum(treatment.velocity_cut).at(f).real / 20)
        factors = []
        for held in self.case.load_cases:
            factor = np.ones((len(f), len(held.loads)), dtype=np.complex128)
            for i, load in enumerate(held.loads):
                if isinstance(load, SurfaceVelocity) and load.surface == panel:
                    factor[:, i] = drive / load.cut_factor(f)  # a cut replaces the load's own, as in the treated case
            factors.append(factor)
        return Change(tuple(walls), tuple(factors))

    def _added(self, side: Side, treatment: Treatment) -> Complex:
        """dY (nf,): the treated wall's admittance less the bare one's."""
        own = [side_admittance(self.case, s, self.frequencies) for s in (self._treated(side, treatment), side)]
        treated, bare = (np.zeros(len(self.frequencies)) if y is None else y for y in own)
        return np.asarray(treated - bare, dtype=np.complex128)

    def _treated(self, side: Side, treatment: Treatment) -> Side:
        moves = self.case.surfaces[side.surface].name in self.case.panels
        return replace(side, boundary=treated_boundary(side.boundary, treatment, moves))

    def _drive(self, panel: str, treatment: Treatment) -> Complex:
        """Treated drive over bare drive, (nf,); one for every fluid that the panel touches.

        Raises: CaseError where the fluids differ in it, or nothing of the bare panel's motion comes through what it carries.
        """
        if treatment.wall is None:
            return np.ones(len(self.frequencies), dtype=np.complex128)
        index = [surface.name for surface in self.case.surfaces].index(panel)
        ratios = []
        for side in self.tables.space.sides_of(index):
            near = adjacent(self.case, side.region, self.frequencies)
            new, old = (s.boundary.drive(self.frequencies, near) for s in (self._treated(side, treatment), side))
            if np.abs(old).min() < HIDDEN:
                words = "but that lets nothing of its motion through; take the untreated case as the baseline"
                raise CaseError(f"'{treatment.name}' is to replace what '{panel}' carries, {words}")
            ratios.append(new / old)
        if not np.allclose(ratios, ratios[0], rtol=1e-9):
            words = "move differently in them; give its part in every fluid a surface of its own"
            raise CaseError(f"'{panel}' touches several fluids, and '{treatment.name}' would {words}")
        return np.asarray(ratios[0])

    # -- answers

    def pressures(self, changes: Sequence[Change], load_case: str = "") -> Complex:
        """p (nf, samples, r) of the r pressures whose mean squares add, with the changes in place."""
        number = self._number(load_case)
        weight = self.mixes[number]
        for change in changes:
            weight = weight * change.factors[number][:, :, None]
        walls = [wall for change in changes for wall in change.walls]
        found = []
        for place, band in enumerate(self.tables.bands):
            answering = [(wall.patch, wall.responses[place]) for wall in walls]
            found.append(band.pressure(answering, number, weight[band.lines]))
        return np.concatenate(found)

    def mean_squares(self, chosen: Sequence[int], load_case: str = "") -> Floats:
        """(receivers, nf) [Pa2, per hertz for a density] with these options in place; () is the baseline.

        Raises: CaseError for two options on one panel.
        """
        panels = [self.options[i].panel for i in chosen]
        if len(set(panels)) < len(panels):
            raise CaseError("two treatments are put on one panel; choose one of them")
        return self.squares([self.changes[i] for i in chosen], load_case)

    def squares(self, changes: Sequence[Change], load_case: str = "") -> Floats:
        """(receivers, nf) [Pa2, per hertz for a density] with some changes in place."""
        square = (np.abs(self.pressures(changes, load_case)) ** 2).sum(axis=2)
        held = self.case.load_case(load_case)
        weights = np.zeros((len(self.case.receivers), len(self.tables.samples.receiver)))
        weights[self.tables.samples.receiver, np.arange(len(self.tables.samples.receiver))] = self.tables.samples.weight
        return np.asarray(0.5 * weights @ square.T / (held.bandwidth if held.spectrum == "density" else 1.0))

    def _number(self, load_case: str) -> int:
        return [held.name for held in self.case.load_cases].index(self.case.load_case(load_case).name)

    def energy(self, squares: Floats, goal: Goal) -> float:
        """Weighted band energy [Pa2] of mean squares (receivers, nf), summed over the goal's receivers."""
        return float(self._energies(squares, goal, [goal_band(self.frequencies, goal)])[0])

    def _energies(self, squares: Floats, goal: Goal, bands: Sequence[Band]) -> Floats:
        rows = goal_rows(self.case, goal)
        kind = self.case.load_case(goal.load_case).spectrum
        return band_energy(self.frequencies, squares[rows].sum(axis=0), bands, kind, goal.weighting)[0]

    def gain(self, chosen: Sequence[int], goal: Goal) -> float:
        """Baseline less treated level [dB] of the goal; positive is quieter."""
        new = self.energy(self.mean_squares(chosen, goal.load_case), goal)
        return float(level(self._bare_energy(goal)) - level(new))

    def _bare_energy(self, goal: Goal) -> float:
        return self.energy(self.mean_squares((), goal.load_case), goal)

    def gains_by_band(self, chosen: Sequence[int], goal: Goal) -> tuple[tuple[Band, float], ...]:
        """Gain [dB] of every third octave in the goal's band; nan where nothing is heard."""
        old, new = (self.mean_squares(c, goal.load_case) for c in ((), tuple(chosen)))
        return self.band_gains(old, new, goal)

    def band_gains(self, before: Floats, after: Floats, goal: Goal) -> tuple[tuple[Band, float], ...]:
        """Gain [dB] between two sets of mean squares (receivers, nf), as `gains_by_band`."""
        whole = goal_band(self.frequencies, goal)
        bands = third_octaves(whole.lower, whole.upper)
        old, new = (self._energies(squares, goal, bands) for squares in (before, after))
        heard = (old > 0) & (new > 0)
        gains = np.where(heard, 10 * np.log10(np.where(heard, old, 1.0) / np.where(heard, new, 1.0)), np.nan)
        return tuple(zip(bands, gains.tolist(), strict=True))
