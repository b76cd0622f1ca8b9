"""How sure a gain is: sampling of what is not known, through the what-if tables.

Ranges are declared once (`case.catalogue.Ranges`). Every sample draws a level and phase for the velocity of every panel, and
factors for the flow resistivity and the thickness of every treatment and for the residual damping of the whole case,

    h_l -> h_l 10^(dL/20) e^{i dphi},   dY -> that of the changed stack,   A_0 -> that of the changed losses.

Levels and phases are uniform. Factors are log-uniform, and drawn from three values only: size^x with x = -sqrt(1/2), 0 or
sqrt(1/2), Chebyshev's points of equal weights, which have the mean, variance and skewness of a uniform x (M. Abramowitz and
I. A. Stegun, Handbook of Mathematical Functions, 25.4.28; cited from memory). So every stack and every damping is computed
exactly and once, whatever the number of samples. The seed is fixed, so that a study can be repeated.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.catalogue import Ranges, Treatment
from murmesh.solver.case.medium import CombinedDamping, Damping, LossFactor, ReverberationTime, WallAbsorption
from murmesh.solver.case.model import Case
from murmesh.solver.case.porous import PorousLaw
from murmesh.solver.case.spectrum import Spectrum, Table
from murmesh.solver.case.wall import Layers, PorousLayer, WallLaw
from murmesh.solver.levels import level
from murmesh.solver.treatment import Goal
from murmesh.solver.whatif import Change, WhatIf

Floats = npt.NDArray[np.float64]
POINTS = (-float(np.sqrt(0.5)), 0.0, float(np.sqrt(0.5)))


Act = tuple[Treatment, str]
"""A treatment and the panel that it goes on."""


@dataclass(frozen=True, eq=False)
class Spread:
    """Gains (samples, sets) [dB] and baseline levels (samples,) [dB]."""

    gains: Floats
    levels: Floats

    def band(self, number: int) -> tuple[float, float]:
        """The middle 80 % of a set's gains [dB]."""
        return _middle(self.gains[:, number])

    @property
    def level_band(self) -> tuple[float, float]:
        """The middle 80 % of the baseline levels [dB]."""
        return _middle(self.levels)

    def stays_first(self, among: slice = slice(None)) -> float:
        """How often the first of some sets is the best of them, 0 to 1."""
        return float(np.mean(self.gains[:, among].argmax(axis=1) == 0))

    def places(self, among: slice = slice(None)) -> tuple[tuple[int, int], ...]:
        """Between which places the middle 80 % of the draws put each of some sets among them; 1 is the best."""
        order = (-self.gains[:, among]).argsort(axis=1, kind="stable").argsort(axis=1) + 1
        return tuple((round(low), round(high)) for low, high in (_middle(column) for column in order.T))


def _middle(values: npt.ArrayLike) -> tuple[float, float]:
    low, high = np.quantile(np.asarray(values, dtype=np.float64), [0.1, 0.9], method="nearest")
    return float(low), float(high)


def scaled_damping(damping: Damping, factor: float) -> Damping:
    """The same losses, `factor` times as large; absorption of the air is physics and stays."""
    match damping:
        case LossFactor():
            return damping.with_(value=_scaled(damping.value, factor, top=1.0))
        case WallAbsorption():
            return damping.with_(coefficient=_scaled(damping.coefficient, factor, top=1.0))
        case ReverberationTime():
            return damping.with_(value=_scaled(damping.value, 1 / factor))
        case CombinedDamping():
            return damping.with_(parts=tuple(scaled_damping(part, factor) for part in damping.parts))
    return damping


def _scaled(value: float | Spectrum, factor: float, top: float = np.inf) -> float | Spectrum:
    if not isinstance(value, Spectrum):
        return float(min(value * factor, top))
    if isinstance(value, Table):
        return value.with_(values=np.minimum(value.values.real * factor, top).astype(np.complex128))
    return value


def damped_case(case: Case, factor: float) -> Case:
    """The case with the residual damping of every region `factor` times as large."""
    return case.with_(regions=tuple(r.with_(damping=scaled_damping(r.damping, factor)) for r in case.regions))


def changed_stack(wall: WallLaw | None, resistivity: float, thickness: float) -> WallLaw | None:
    """A stack whose porous layers have other flow resistivities and thicknesses; other laws as they are."""
    if not isinstance(wall, Layers):
        return wall
    layers = tuple(
        layer.with_(law=_resistive(layer.law, resistivity), thickness=layer.thickness * thickness)
        if isinstance(layer, PorousLayer)
        else layer
        for layer in wall.layers
    )
    return wall.with_(layers=layers)


def _resistive(law: PorousLaw, factor: float) -> PorousLaw:
    value = getattr(law, "flow_resistivity", None)
    return law if value is None else law.with_(flow_resistivity=float(value) * factor)


def spread(
    whatif: WhatIf,
    sets: Sequence[Sequence[Act]],
    goal: Goal,
    ranges: Ranges,
    samples: int = 200,
    *,
    seed: int = 1,
    report: Callable[[str], None] = lambda words: None,
) -> Spread:
    """Gains of `sets`, each at most one treatment per panel, over `samples` draws of everything that is not known."""
    tables = [_Table(each, ranges) for each in _damping_tables(whatif, ranges, report)]
    rng = np.random.default_rng(seed)
    report(f"{samples} samples of {len(sets)} sets")
    gains, levels = np.zeros((samples, len(sets))), np.zeros(samples)
    for number in range(samples):
        draw = _Draw.of(rng, whatif.case, ranges)
        table = tables[draw.damping if len(tables) > 1 else 0]
        bare = table.energy(draw, (), goal)
        levels[number] = level(bare / max(len(goal.receivers or whatif.case.receivers), 1))
        gains[number] = [10 * np.log10(bare / table.energy(draw, chosen, goal)) for chosen in sets]
    return Spread(gains, levels)


def _damping_tables(whatif: WhatIf, ranges: Ranges, report: Callable[[str], None]) -> list[WhatIf]:
    """What-ifs for every point of the damping; one where it is known."""
    if ranges.damping <= 1.0:
        return [whatif]
    found = []
    for point in POINTS:
        factor = ranges.damping**point
        report(f"residual damping times {factor:.2g}")
        found.append(whatif if point == 0.0 else whatif.damped(damped_case(whatif.case, factor), report))
    return found


@dataclass(frozen=True, eq=False)
class _Draw:
    """One draw: numbers of the points of the damping and, by treatment, of flow resistivity and thickness; a complex factor
    per panel."""

    damping: int
    stacks: dict[str, tuple[int, int]]
    velocity: dict[str, complex]

    @classmethod
    def of(cls, rng: np.random.Generator, case: Case, ranges: Ranges) -> _Draw:
        points = rng.integers(len(POINTS), size=(len(case.catalogue), 2))
        phases = np.deg2rad(ranges.phase) * rng.uniform(-1, 1, len(case.panels))
        levels = ranges.velocity * rng.uniform(-1, 1, len(case.panels))
        velocity = 10 ** (levels / 20) * np.exp(1j * phases)
        return cls(
            int(rng.integers(len(POINTS))),
            {t.name: (int(i), int(j)) for t, (i, j) in zip(case.catalogue, points, strict=True)},
            {panel: complex(v) for panel, v in zip(case.panels, velocity, strict=True)},
        )

    def loads(self, whatif: WhatIf) -> Change:
        """What is different about the panels' velocities."""
        lines = len(whatif.frequencies)
        factors = tuple(
            np.tile([self.velocity.get(load.acts_on, 1.0 + 0j) for load in held.loads], (lines, 1))
            for held in whatif.case.load_cases
        )
        return Change((), factors)


@dataclass(frozen=True, eq=False)
class _Table:
    """What-ifs at one damping, and what was asked of them before: options with changed stacks."""

    whatif: WhatIf
    ranges: Ranges
    known: dict[tuple[str, str, float, float], Change] = field(default_factory=dict)

    def energy(self, draw: _Draw, chosen: Sequence[Act], goal: Goal) -> float:
        """Band energy of a draw."""
        changes = [draw.loads(self.whatif), *(self._change(act, draw) for act in chosen)]
        return self.whatif.energy(self.whatif.squares(changes, goal.load_case), goal)

    def _change(self, act: Act, draw: _Draw) -> Change:
        treatment, panel = act
        resistivity, thickness = (POINTS[i] for i in draw.stacks.get(treatment.name, (1, 1)))
        factors = self.ranges.flow_resistivity**resistivity, self.ranges.thickness**thickness
        key = treatment.name, panel, *factors
        if key not in self.known:
            changed = replace(treatment, wall=changed_stack(treatment.wall, *factors))
            self.known[key] = self.whatif.change(changed, panel)
        return self.known[key]
