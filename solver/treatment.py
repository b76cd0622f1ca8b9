"""Which treatment of which panel helps: what-ifs in milliseconds, from tables made once.

A treatment on panel j changes its admittance by dY_j and its load by a factor h_j,

    (A_0 + i w sum_j dY_j B_j) x = sum_l h_l f_l.

T_j is a real basis of the traces that the baseline's fields and the receivers' adjoints z leave on panel j, orthonormal in
B_j. With a_j the coordinates of the new trace, and for every line once

    G = T^T B A_0^-1 B T,   t_l = T^T B A_0^-1 f_l,   t_z = T^T B z,   p_l = z^T f_l,

every combination of treatments is a small system and a correction of the pressure,

    (I + G D) a = sum_l h_l t_l,   p = sum_l h_l p_l - t_z^T D a,   D = diag(i w dY_j).

Exact where T spans the new traces; `verified` solves a choice again in full. A_0^-1 B T is not solved on every line: a model
that holds the sweep's basis and A_0^-1 B T of a few lines gives it (near fields change slowly), checked on held-out lines.
"""

from __future__ import annotations

import fnmatch
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from itertools import pairwise

import numpy as np
import numpy.typing as npt
import scipy.linalg
import scipy.sparse as sp

from murmesh.solver.assembly import surface_area, surface_mass
from murmesh.solver.case.boundary import Boundary, Impedance, Sheet, VibratingTreated
from murmesh.solver.case.catalogue import Treatment
from murmesh.solver.case.load import LoadCase, SurfaceVelocity
from murmesh.solver.case.model import Case
from murmesh.solver.case.spectrum import as_spectrum
from murmesh.solver.engine import Engine
from murmesh.solver.errors import CaseError, SolveError, nearest
from murmesh.solver.levels import Band, band_energy, level, third_octaves
from murmesh.solver.receiver_points import Samples, locate_receivers
from murmesh.solver.reduced import orthonormal, reduce
from murmesh.solver.result import Result
from murmesh.solver.space import Side, Space
from murmesh.solver.sweep import solve
from murmesh.solver.system import Projected, System, Values, adjacent, build_system, side_admittance

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
Ints = npt.NDArray[np.int64]

VECTORS, TAIL = 36, 3e-4
"""Largest number of trace vectors per panel, and the part of the traces' size that may be left out."""
NEAR_FIELD_LINES = (0.15, 0.97)
"""Where in the list of lines A_0^-1 B T is solved in full."""
HELD_OUT_LINES = (0.35, 0.85)
NEAR_FIELD_PART = 1e-2
"""Part of a unit vector that must be new for a near field to enter the basis."""
AGREEMENT = 0.05
"""Largest difference [dB] between a predicted and a verified gain."""


# ---------------------------------------------------------------------------------------------------------------------
# what can be done


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
    if isinstance(boundary, Sheet) or boundary.fixes_pressure or boundary.takes_wave:
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
    by_panel = {option.panel: _treatment(case, option.treatment) for option in chosen}
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


def _treatment(case: Case, name: str) -> Treatment:
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


# ---------------------------------------------------------------------------------------------------------------------
# tables


@dataclass(frozen=True, eq=False)
class Patch:
    """One side of a panel that may carry a wall: B (n, n) on its unknowns, and its traces' columns in the tables."""

    side: Side
    panel: str
    mass: sp.csr_matrix
    columns: slice


@dataclass(frozen=True, eq=False)
class Change:
    """What an option does: D (nf,) [i w dY] per patch, and the factor (nf, loads) on the loads of every load case."""

    patches: tuple[tuple[int, Complex], ...]
    factors: tuple[Complex, ...]


@dataclass(frozen=True, eq=False)
class Tables:
    """Per line: G (nf, m, m) in single precision, traces t (nf, m, loads) and pressures p (nf, samples, loads) of the loads
    of every load case, and adjoint traces t_z (nf, m, samples)."""

    g: npt.NDArray[np.complex64]
    traces: tuple[Complex, ...]
    pressures: tuple[Complex, ...]
    adjoints: Complex


@dataclass(frozen=True, eq=False)
class WhatIf:
    """Answers for one solved case; made by `build`."""

    case: Case
    space: Space
    samples: Samples
    frequencies: Floats
    options: tuple[Option, ...]
    patches: tuple[Patch, ...]
    tables: Tables
    mixes: tuple[Complex, ...]
    held_out: float
    """Largest relative error of G on the held-out lines."""

    @classmethod
    def build(cls, result: Result, *, report: Callable[[str], None] = lambda words: None) -> WhatIf:
        """Tables of a result's case, on the basis of its reduced model or, where its lines were solved directly, on one grown
        for the purpose.

        Raises: CaseError where no panel can carry a treatment of the catalogue.
        """
        case, space = result.case, result.space
        choices = options(case, space)
        if not choices:
            raise CaseError("the catalogue holds no treatment that any panel can carry; add one, or widen its panels")
        return _Builder.of(result, choices, report).whatif()

    @cached_property
    def changes(self) -> tuple[Change, ...]:
        """What every option does, in their order."""
        return tuple(self.change(_treatment(self.case, option.treatment), option.panel) for option in self.options)

    def change(self, treatment: Treatment, panel: str) -> Change:
        """What a treatment does on a panel; laws are asked, nothing is solved."""
        f = self.frequencies
        index = [surface.name for surface in self.case.surfaces].index(panel)
        patches = []
        for number, patch in enumerate(self.patches):
            if patch.panel == panel and treatment.wall is not None:
                patches.append((number, 2j * np.pi * f * self._added(patch.side, treatment)))
        [side] = self.space.sides_of(index)[:1]
        drive = self._drive(side, treatment) * 10 ** (-as_spectrum(treatment.velocity_cut).at(f).real / 20)
        factors = []
        for held in self.case.load_cases:
            factor = np.ones((len(f), len(held.loads)), dtype=np.complex128)
            factor[:, [i for i, load in enumerate(held.loads) if load.acts_on == panel]] = drive[:, None]
            factors.append(factor)
        return Change(tuple(patches), tuple(factors))

    def _added(self, side: Side, treatment: Treatment) -> Complex:
        """dY (nf,): the treated wall's admittance less the bare one's."""
        own = [side_admittance(self.case, s, self.frequencies) for s in (self._treated(side, treatment), side)]
        treated, bare = (np.zeros(len(self.frequencies)) if y is None else y for y in own)
        return np.asarray(treated - bare, dtype=np.complex128)

    def _treated(self, side: Side, treatment: Treatment) -> Side:
        moves = self.case.surfaces[side.surface].name in self.case.panels
        return replace(side, boundary=treated_boundary(side.boundary, treatment, moves))

    def _drive(self, side: Side, treatment: Treatment) -> Complex:
        """Treated drive over bare drive, (nf,)."""
        near = adjacent(self.case, side.region, self.frequencies)
        new, old = (s.boundary.drive(self.frequencies, near) for s in (self._treated(side, treatment), side))
        return np.asarray(new / old)

    # -- answers

    def pressures(self, changes: Sequence[Change], load_case: str = "") -> Complex:
        """p (nf, samples, r) of the r pressures whose mean squares add, with the changes in place."""
        number = self._number(load_case)
        weight = self.mixes[number]
        for change in changes:
            weight = weight * change.factors[number][:, :, None]
        pressure = np.asarray(self.tables.pressures[number] @ weight)
        d, at, a = self._traces(changes, number, weight)
        if not len(at):
            return pressure
        return np.asarray(pressure - np.swapaxes(self.tables.adjoints[:, at], 1, 2) @ (d[:, :, None] * a))

    def _traces(self, changes: Sequence[Change], number: int, weight: Complex) -> tuple[Complex, Ints, Complex]:
        """D (nf, m), the columns of the tables it stands for (m,), and the new traces a (nf, m, r) of weighted loads."""
        walls = [(self.patches[i].columns, d) for change in changes for i, d in change.patches]
        at = np.concatenate([np.arange(c.start, c.stop) for c, _ in walls] or [np.zeros(0, dtype=np.int64)])
        if not len(at):
            return np.zeros((len(self.frequencies), 0), dtype=np.complex128), at, np.zeros((0, 0, 0), dtype=np.complex128)
        d = np.column_stack([d for _, d in walls]).repeat([c.stop - c.start for c, _ in walls], axis=1)
        right = (self.tables.traces[number][:, at] @ weight).astype(np.complex64)
        return d, at, np.linalg.solve(self._closed(walls, len(at)), right).astype(np.complex128)

    def _closed(self, walls: Sequence[tuple[slice, Complex]], size: int) -> npt.NDArray[np.complex64]:
        """I + G D (nf, m, m), block by block; single precision moves a gain by 1e-5 dB and halves the time."""
        out = np.empty((len(self.frequencies), size, size), dtype=np.complex64)
        ends = np.cumsum([0, *(c.stop - c.start for c, _ in walls)])
        blocks = [slice(int(a), int(b)) for a, b in pairwise(ends)]
        for (right, d), columns in zip(walls, blocks, strict=True):
            factor = d.astype(np.complex64)[:, None, None]
            for (left, _), rows in zip(walls, blocks, strict=True):
                np.multiply(self.tables.g[:, left, right], factor, out=out[:, rows, columns])
        out[:, np.arange(size), np.arange(size)] += 1.0
        return out

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
        weights = np.zeros((len(self.case.receivers), len(self.samples.receiver)))
        weights[self.samples.receiver, np.arange(len(self.samples.receiver))] = self.samples.weight
        return np.asarray(0.5 * weights @ square.T / (held.bandwidth if held.spectrum == "density" else 1.0))

    def _number(self, load_case: str) -> int:
        return [held.name for held in self.case.load_cases].index(self.case.load_case(load_case).name)

    def energy(self, squares: Floats, goal: Goal) -> float:
        """Weighted band energy [Pa2] of mean squares (receivers, nf), summed over the goal's receivers."""
        return float(self._energies(squares, goal, [_goal_band(self.frequencies, goal)])[0])

    def _energies(self, squares: Floats, goal: Goal, bands: Sequence[Band]) -> Floats:
        rows = _rows(self.case, goal)
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
        whole = _goal_band(self.frequencies, goal)
        bands = third_octaves(whole.lower, whole.upper)
        old, new = (self._energies(squares, goal, bands) for squares in (before, after))
        heard = (old > 0) & (new > 0)
        gains = np.where(heard, 10 * np.log10(np.where(heard, old, 1.0) / np.where(heard, new, 1.0)), np.nan)
        return tuple(zip(bands, gains.tolist(), strict=True))


def _rows(case: Case, goal: Goal) -> list[int]:
    names = [receiver.name for receiver in case.receivers]
    for name in goal.receivers:
        if name not in names:
            raise CaseError(f"no receiver is called '{name}'; {nearest(name, names)}")
    return [names.index(name) for name in goal.receivers or names]


def _goal_band(frequencies: Floats, goal: Goal) -> Band:
    low, high = goal.band or (float(frequencies[0]), float(frequencies[-1]))
    return Band(f"{low:g}-{high:g}", float(np.sqrt(low * high)), low, high * (1 + 1e-9))


# ---------------------------------------------------------------------------------------------------------------------
# making the tables


@dataclass(frozen=True, eq=False)
class _Builder:
    """What the tables are made from: the full sum, the sweep's basis, and the patches that may carry a wall."""

    result: Result
    engine: Engine
    samples: Samples
    values: list[Values]
    basis: Floats
    choices: tuple[Option, ...]
    report: Callable[[str], None]

    @classmethod
    def of(cls, result: Result, choices: tuple[Option, ...], report: Callable[[str], None]) -> _Builder:
        samples = locate_receivers(result.case, result.space.geometry)
        system = build_system(result.space, samples)
        engine, values = Engine.of(system), system.values(result.frequencies)
        if result.model is not None:
            held, fixed = result.model.basis.astype(np.float64), result.model.projected.fixed
        else:
            model, _, _ = reduce(engine, samples, values, result.case.sweep.tolerance)
            held, fixed = model.basis, model.projected.fixed
        basis = orthonormal(np.zeros((system.size, 0)), held[:, ~fixed])
        return cls(result, engine, samples, values, basis, choices, report)

    @property
    def system(self) -> System:
        return self.engine.system

    def whatif(self) -> WhatIf:
        self.report("traces on the panels")
        patches, traces = self._patches()
        loads = np.hstack([np.asarray(p.mass @ t) for p, t in zip(patches, traces, strict=True)] or [self.basis[:, :0]])
        self.report(f"near fields of {loads.shape[1]} trace vectors on {len(patches)} panels")
        model, w = self._project(np.hstack([self.basis, self._near_fields(loads)]))
        self.report(f"tables of {len(self.values)} lines")
        tables = self._tables(model, np.asarray(w.T @ loads))
        case = self.result.case
        mixes = tuple(np.stack([v.mix[i] for v in self.values]) for i in range(len(case.load_cases)))
        head = case, self.result.space, self.samples, self.result.frequencies, self.choices, tuple(patches)
        return WhatIf(*head, tables, mixes, self._held_out(loads, tables))

    # -- traces

    def _patches(self) -> tuple[list[Patch], list[Floats]]:
        """Patches of every panel with an option that changes its wall, and B-orthonormal trace bases (n, m)."""
        case, space = self.result.case, self.result.space
        walls = {t.name for t in case.catalogue if t.wall is not None}
        panels = dict.fromkeys(o.panel for o in self.choices if o.treatment in walls)
        snapshots = self._snapshots() if panels else np.zeros((self.basis.shape[1], 0))
        patches, traces, start = [], [], 0
        for side in space.sides:
            panel = case.surfaces[side.surface].name
            if panel not in panels:
                continue
            mass = surface_mass(space.geometry, space.dofs, side.tet, side.face)
            trace = self._trace(mass, snapshots)
            patches.append(Patch(side, panel, mass, slice(start, start + trace.shape[1])))
            traces.append(trace)
            start += trace.shape[1]
        return patches, traces

    def _snapshots(self) -> Floats:
        """Fields of every load and adjoints of every sample, in the basis, real and imaginary parts, of equal size."""
        small, _ = self._project(self.basis)
        columns = [np.hstack(_solutions(small, values)) for values in self.values]
        parts = np.hstack([part for block in columns for part in (block.real, block.imag)])[~small.fixed]
        size = np.linalg.norm(parts, axis=0)
        return np.asarray(parts[:, size > 0] / size[size > 0])

    def _trace(self, mass: sp.csr_matrix, snapshots: Floats) -> Floats:
        """The leading traces: eigenvectors of the snapshots' correlation in the inner product of B."""
        gram = self.basis.T @ (mass @ self.basis)
        values, vectors = np.linalg.eigh(gram)
        kept = values > 1e-12 * values.max()
        root = vectors[:, kept] * np.sqrt(values[kept])
        left = _leading(root.T @ snapshots)
        return np.asarray(self.basis @ (vectors[:, kept] / np.sqrt(values[kept]) @ left))

    # -- A^-1 B T

    def _near_fields(self, loads: Floats) -> Floats:
        """A_0^-1 B T at a few lines, real and imaginary parts, orthonormal and new to the basis."""
        found, basis = [], self.basis
        for index in _places(NEAR_FIELD_LINES, len(self.values)):
            exact = self._solved(index, loads)
            new = orthonormal(basis, np.hstack([exact.real, exact.imag]), NEAR_FIELD_PART)
            found.append(new)
            basis = np.hstack([basis, new])
        return np.hstack(found)

    def _solved(self, index: int, loads: Floats) -> Complex:
        """A_0^-1 B T at a line, by the sparse solver."""
        free = self.engine.free
        factor = self.engine.factor(self.system.matrix(self.values[index].phi))
        out = np.zeros(loads.shape, dtype=np.complex128)
        out[free] = factor.solve(np.ascontiguousarray(loads[free], dtype=np.complex128))
        return out

    def _project(self, basis: Floats) -> tuple[System, Floats]:
        """The sum on W = [prescribed shapes, basis], and W."""
        system, shapes = self.system, self.system.prescribed_shapes
        projected, held = Projected.empty(system), np.zeros((system.size, 0))
        for columns, prescribed in ((shapes, True), (basis, False)):
            right = [np.asarray(term.matrix @ columns) for term in system.terms]
            left = right if system.symmetric else [np.asarray(term.matrix.T @ columns) for term in system.terms]
            projected = projected.extended(system, held, columns, (right, left), prescribed=prescribed)
            held = np.hstack([held, columns])
        return system.on(projected), held

    def _tables(self, model: System, rows: Floats) -> Tables:
        """The tables of every line; rows (K, m) are W^T B T."""
        found = [_line_tables(model, values, rows) for values in self.values]
        sets = range(len(self.result.case.load_cases))
        return Tables(
            np.stack([f[0].astype(np.complex64) for f in found]),
            tuple(np.stack([f[1][i] for f in found]) for i in sets),
            tuple(np.stack([f[2][i] for f in found]) for i in sets),
            np.stack([f[3] for f in found]),
        )

    def _held_out(self, loads: Floats, tables: Tables) -> float:
        """Largest relative error of G on lines that the near fields were not taken from."""
        worst = 0.0
        for index in _places(HELD_OUT_LINES, len(self.values)):
            exact = loads.T @ self._solved(index, loads)
            size = max(float(np.linalg.norm(exact)), 1e-300)
            worst = max(worst, float(np.linalg.norm(tables.g[index] - exact)) / size)
        return worst


def _leading(snapshots: Floats) -> Floats:
    """Orthonormal columns that hold the columns of `snapshots` best, up to the part `TAIL` of their size."""
    left, size, _ = np.linalg.svd(snapshots @ snapshots.T, hermitian=True)
    kept = np.sqrt(np.maximum(size, 0) / max(size[0], 1e-300)) > TAIL
    return np.asarray(left[:, : min(VECTORS, int(np.count_nonzero(kept)))])


def _places(parts: Sequence[float], lines: int) -> tuple[int, ...]:
    return tuple(dict.fromkeys(round(part * (lines - 1)) for part in parts))


def _solutions(model: System, values: Values, rows: Floats | None = None) -> list[Complex]:
    """Coordinates of the field of every load of every load case, of A^-1 rows, and of every sample's adjoint."""
    free = ~model.fixed
    matrix = model.matrix(values.phi)
    lu = scipy.linalg.lu_factor(matrix[np.ix_(free, free)])
    given, right = [], []
    for held, psi in zip(model.load_sets, values.psi, strict=True):
        forces, known = held.vectors(psi)
        given.append(known)
        right.append((forces - matrix @ known)[free])
    more = [] if rows is None else [rows[free].astype(np.complex128)]
    forward = scipy.linalg.lu_solve(lu, np.hstack([*right, *more]))
    outputs = values.heard(np.asarray(model.receivers)).T[free].astype(np.complex128)
    backward = scipy.linalg.lu_solve(lu, outputs, trans=1)
    blocks = []
    ends = np.cumsum([0, *(block.shape[1] for block in (*right, *more))])
    for i, (a, b) in enumerate(pairwise(ends)):
        out = given[i].copy() if i < len(given) else np.zeros((len(free), b - a), dtype=np.complex128)
        out[free] += forward[:, a:b]
        blocks.append(out)
    adjoint = np.zeros((len(free), backward.shape[1]), dtype=np.complex128)
    adjoint[free] = backward
    return [*blocks, adjoint]


def _line_tables(model: System, values: Values, rows: Floats) -> tuple[Complex, list[Complex], list[Complex], Complex]:
    """G, traces and pressures per load case, and adjoint traces at one line; rows (K, m) are W^T B T."""
    *fields, near, adjoint = _solutions(model, values, rows)
    receivers = values.heard(np.asarray(model.receivers))
    pressures = [receivers @ x for x in fields]
    if values.direct:
        pressures = [p + d for p, d in zip(pressures, values.direct, strict=True)]
    return rows.T @ near, [rows.T @ x for x in fields], pressures, rows.T @ adjoint


# ---------------------------------------------------------------------------------------------------------------------
# verification


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
    names = [before.case.receivers[i].name for i in _rows(before.case, goal)]
    kind = before.case.load_case(goal.load_case).spectrum
    band = [_goal_band(before.frequencies, goal)]
    energies = []
    for result in (before, after):
        square = np.sum([result.mean_square(name, goal.load_case) for name in names], axis=0)
        energies.append(float(band_energy(result.frequencies, square, band, kind, goal.weighting)[0][0]))
    return float(level(energies[0]) - level(energies[1]))
