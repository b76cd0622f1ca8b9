"""What can be done: every treatment on every panel that can carry it, the treated case, and the verification of a gain.

A treatment changes the wall of a panel, its velocity, or both (`case.catalogue`). `whatif` predicts what a set of them does
without solving the model again; `verified` solves the treated case in full and compares.
"""

from __future__ import annotations

import fnmatch
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from murmesh.solver.assembly import surface_area
from murmesh.solver.case.boundary import Boundary, Impedance, Sheet, VibratingTreated
from murmesh.solver.case.catalogue import Treatment
from murmesh.solver.case.load import LoadCase, SurfaceVelocity
from murmesh.solver.case.model import Case
from murmesh.solver.errors import CaseError, SolveError, nearest
from murmesh.solver.levels import Band, band_energy, level
from murmesh.solver.result import Result
from murmesh.solver.space import Space
from murmesh.solver.sweep import solve

Floats = npt.NDArray[np.float64]

AGREEMENT = 0.05
"""Largest difference [dB] between a predicted and a verified gain."""


@dataclass(frozen=True)
class Option:
    """One treatment of the catalogue on one panel: area [m2], mass [kg], cost [EUR], thickness [m]."""

    panel: str
    treatment: str
    area: float
    mass: float
    cost: float
    thickness: float

    @property
    def name(self) -> str:
        """What it is called in tables."""
        return f"{self.treatment} on {self.panel}"


@dataclass(frozen=True)
class Goal:
    """What is to become quieter: band energy [Pa2] summed over receivers (none: all), of one load case (none: the first)."""

    receivers: tuple[str, ...] = ()
    load_case: str = ""
    band: tuple[float, float] | None = None
    weighting: str = "A"


def options(case: Case, space: Space) -> tuple[Option, ...]:
    """Every pair of a treatment and a panel that it may go on, in the order of catalogue and surfaces.

    Raises: CaseError where a treatment names no surface of the case, or one inside the air.
    """
    found = []
    for treatment in case.catalogue:
        for name in allowed_panels(case, treatment):
            index = [surface.name for surface in case.surfaces].index(name)
            area = sum(surface_area(space.geometry, side.tet, side.face) for side in space.sides_of(index))
            mass, cost = treatment.mass_per_area * area, treatment.cost_per_area * area
            found.append(Option(name, treatment.name, area, mass, cost, treatment.thickness))
    return tuple(found)


def allowed_panels(case: Case, treatment: Treatment) -> tuple[str, ...]:
    """Names of the surfaces that a treatment's patterns allow and that can carry it."""
    names = [surface.name for surface in case.surfaces]
    for pattern in treatment.panels:
        if not fnmatch.filter(names, pattern):
            raise CaseError(f"catalogue/{treatment.name}: no surface is called '{pattern}'; {nearest(pattern, names)}")
    wanted = [name for name in names if any(fnmatch.fnmatchcase(name, pattern) for pattern in treatment.panels)]
    moving = set(case.panels)
    return tuple(name for name in wanted if _can_carry(case.surface(name).boundary, treatment, name in moving))


def _can_carry(boundary: Boundary, treatment: Treatment, moves: bool) -> bool:
    if isinstance(boundary, Sheet) or boundary.fixes_pressure or boundary.takes_wave or boundary.radiates:
        return False
    return treatment.wall is not None or moves


def treated_boundary(boundary: Boundary, treatment: Treatment, moves: bool) -> Boundary:
    """The boundary kind of a panel with a treatment on it; as it was where the treatment only cuts its velocity."""
    if treatment.wall is None:
        return boundary
    return VibratingTreated(treatment.wall, treatment.frame) if moves else Impedance(treatment.wall)


def treated_case(case: Case, chosen: Sequence[Option]) -> Case:
    """The case with the chosen treatments in place, at most one per panel: what a full solve is given.

    Raises: CaseError for two treatments on one panel, or an unknown name.
    """
    by_panel = {option.panel: treatment_called(case, option.treatment) for option in chosen}
    if len(by_panel) < len(chosen):
        raise CaseError("two treatments are put on one panel; choose one of them, or describe both as one treatment")
    for option in chosen:
        case.surface(option.panel)
    moving = set(case.panels)
    surfaces = tuple(
        s.with_(boundary=treated_boundary(s.boundary, by_panel[s.name], s.name in moving)) if s.name in by_panel else s
        for s in case.surfaces
    )
    return case.with_(surfaces=surfaces, load_cases=tuple(_cut(case, held, by_panel) for held in case.load_cases))


def treatment_called(case: Case, name: str) -> Treatment:
    """The treatment of the case's catalogue with this name.

    Raises: CaseError where there is none.
    """
    for treatment in case.catalogue:
        if treatment.name == name:
            return treatment
    raise CaseError(f"no treatment is called '{name}'; {nearest(name, [t.name for t in case.catalogue])}")


def _cut(case: Case, load_case: LoadCase, by_panel: dict[str, Treatment]) -> LoadCase:
    loads = [
        load.with_(cut=by_panel[load.surface].velocity_cut)
        if isinstance(load, SurfaceVelocity) and load.surface in by_panel
        else load
        for load in load_case.loads
    ]
    return load_case.with_(loads=tuple(loads))


def goal_rows(case: Case, goal: Goal) -> list[int]:
    """Rows of the goal's receivers among those of the case.

    Raises: CaseError for a receiver that the case does not hold.
    """
    names = [receiver.name for receiver in case.receivers]
    for name in goal.receivers:
        if name not in names:
            raise CaseError(f"no receiver is called '{name}'; {nearest(name, names)}")
    return [names.index(name) for name in goal.receivers or names]


def goal_band(frequencies: Floats, goal: Goal) -> Band:
    """The goal's band, the whole sweep where it names none; its upper edge belongs to it."""
    low, high = goal.band or (float(frequencies[0]), float(frequencies[-1]))
    return Band(f"{low:g}-{high:g}", float(np.sqrt(low * high)), low, high * (1 + 1e-9))


@dataclass(frozen=True, eq=False)
class Verification:
    """A choice solved again in full: predicted and verified gain [dB], and the result."""

    chosen: tuple[Option, ...]
    predicted: float
    gain: float
    result: Result

    @property
    def difference(self) -> float:
        """Predicted less verified gain [dB]."""
        return self.predicted - self.gain


def verified(baseline: Result, chosen: Sequence[Option], goal: Goal, predicted: float, **solving: object) -> Verification:
    """Solve the treated case in full and compare.

    Raises: SolveError where the predicted gain is off by more than `AGREEMENT`: an error of ours, not of the user.
    """
    case = treated_case(baseline.case, chosen)
    case = case.with_(sweep=case.sweep.with_(error_bar=False))  # the same mesh before and after
    orders = baseline.orders.astype(np.int64)
    result = solve(case, orders=orders, **solving)  # type: ignore[arg-type]
    gain = result_gain(baseline, result, goal)
    found = Verification(tuple(chosen), predicted, gain, result)
    if abs(found.difference) > AGREEMENT:
        raise SolveError(
            f"the gain of {', '.join(option.name for option in chosen)} was predicted as {predicted:.3f} dB, but a full "
            f"solution gives {gain:.3f} dB; this is an error of murmesh, please report it with the case"
        )
    return found


def result_gain(before: Result, after: Result, goal: Goal) -> float:
    """Level before less level after [dB] of a goal, from two results on the same lines."""
    names = [before.case.receivers[i].name for i in goal_rows(before.case, goal)]
    kind = before.case.load_case(goal.load_case).spectrum
    band = [goal_band(before.frequencies, goal)]
    energies = []
    for result in (before, after):
        square = np.sum([result.mean_square(name, goal.load_case) for name in names], axis=0)
        energies.append(float(band_energy(result.frequencies, square, band, kind, goal.weighting)[0][0]))
    return float(level(energies[0]) - level(energies[1]))
