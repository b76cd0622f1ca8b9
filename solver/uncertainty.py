"""How sure a gain is: sampling of what is not known, through the what-if tables.

Ranges are declared once (`case.catalogue.Ranges`); each sample draws a factor for the flow resistivity and the thickness of
every treatment, and a level and phase for the velocity of every panel,

    h_l -> h_l 10^(dL/20) e^{i dphi},   dY -> that of the changed stack,

and one factor for the residual damping of the whole case. Damping changes the baseline itself, so tables are made for the
factors of `DAMPING_STEPS` times the range's end and band energies are interpolated in the logarithm of the factor between
them. Factors are log-uniform, levels and phases uniform; the seed is fixed, so that a study can be repeated.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.catalogue import Ranges, Treatment
from murmesh.solver.case.medium import CombinedDamping, Damping, LossFactor, ReverberationTime, WallAbsorption
from murmesh.solver.case.model import Case
from murmesh.solver.case.porous import PorousLaw
from murmesh.solver.case.spectrum import Spectrum, Table
from murmesh.solver.case.wall import Layers, PorousLayer, WallLaw
from murmesh.solver.result import Result
from murmesh.solver.sweep import solve
from murmesh.solver.treatment import Change, Goal, WhatIf

Floats = npt.NDArray[np.float64]
DAMPING_STEPS = (-1.0, 0.0, 1.0)


@dataclass(frozen=True, eq=False)
class Spread:
    """Gains (samples, sets) [dB], baseline levels (samples,) [dB], and the sets they are of."""

    sets: tuple[tuple[int, ...], ...]
    gains: Floats
    levels: Floats

    def band(self, number: int, inner: float = 0.8) -> tuple[float, float]:
        """The middle `inner` of a set's gains [dB]: from its lower to its upper quantile."""
        low, high = np.quantile(self.gains[:, number], [0.5 - inner / 2, 0.5 + inner / 2])
        return float(low), float(high)

    @property
    def level_band(self) -> tuple[float, float]:
        """The middle 80 % of the baseline levels [dB]."""
        low, high = np.quantile(self.levels, [0.1, 0.9])
        return float(low), float(high)

    def stays_first(self, number: int = 0) -> float:
        """How often a set is the best of them all, 0 to 1."""
        return float(np.mean(self.gains.argmax(axis=1) == number))


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
    result: Result,
    whatif: WhatIf,
    sets: Sequence[tuple[int, ...]],
    goal: Goal,
    ranges: Ranges,
    samples: int = 200,
    *,
    seed: int = 1,
    report: Callable[[str], None] = lambda words: None,
) -> Spread:
    """Gains of `sets` (indices into the options) over `samples` draws of everything that is not known."""
    steps = _damping_tables(result, whatif, ranges, report)
    rng = np.random.default_rng(seed)
    report(f"{samples} samples of {len(sets)} sets")
    gains, levels = np.zeros((samples, len(sets))), np.zeros(samples)
    for number in range(samples):
        draw = _Draw.of(rng, whatif.case, ranges)
        bare = _energy(steps, draw, (), goal)
        levels[number] = 10 * np.log10(bare / max(len(goal.receivers or whatif.case.receivers), 1) / 4e-10)
        gains[number] = [10 * np.log10(bare / _energy(steps, draw, chosen, goal)) for chosen in sets]
    return Spread(tuple(sets), gains, levels)


def _damping_tables(
    result: Result, whatif: WhatIf, ranges: Ranges, report: Callable[[str], None]
) -> list[tuple[float, WhatIf]]:
    """Tables at the logarithms of the damping factors."""
    if ranges.damping <= 1.0:
        return [(0.0, whatif)]
    found = []
    for step in DAMPING_STEPS:
        if step == 0.0:
            found.append((0.0, whatif))
            continue
        factor = ranges.damping**step
        report(f"tables with the residual damping times {factor:.2g}")
        case = damped_case(result.case, factor)
        case = case.with_(sweep=case.sweep.with_(error_bar=False, method="reduced"))
        other = solve(case, orders=result.orders.astype(np.int64))
        found.append((float(np.log(factor)), WhatIf.build(other)))
    return found


@dataclass(frozen=True, eq=False)
class _Draw:
    """One draw: logarithm of the damping factor, factors by treatment, and a complex factor per panel."""

    damping: float
    resistivity: dict[str, float]
    thickness: dict[str, float]
    velocity: dict[str, complex]

    @classmethod
    def of(cls, rng: np.random.Generator, case: Case, ranges: Ranges) -> _Draw:
        def factor(size: float) -> float:
            return float(size ** rng.uniform(-1, 1))

        names = [treatment.name for treatment in case.catalogue]
        phases = np.deg2rad(ranges.phase) * rng.uniform(-1, 1, len(case.panels))
        levels = ranges.velocity * rng.uniform(-1, 1, len(case.panels))
        velocity = 10 ** (levels / 20) * np.exp(1j * phases)
        return cls(
            float(np.log(ranges.damping) * rng.uniform(-1, 1)),
            {name: factor(ranges.flow_resistivity) for name in names},
            {name: factor(ranges.thickness) for name in names},
            {panel: complex(v) for panel, v in zip(case.panels, velocity, strict=True)},
        )

    def changes(self, whatif: WhatIf, chosen: tuple[int, ...]) -> list[Change]:
        """What the chosen options do in this draw, and what is different about the panels' velocities."""
        found = [self._loads(whatif)]
        by_name = {treatment.name: treatment for treatment in whatif.case.catalogue}
        for i in chosen:
            option = whatif.options[i]
            found.append(whatif.change(self._treatment(by_name[option.treatment]), option.panel))
        return found

    def _treatment(self, treatment: Treatment) -> Treatment:
        wall = changed_stack(treatment.wall, self.resistivity[treatment.name], self.thickness[treatment.name])
        return replace(treatment, wall=wall)

    def _loads(self, whatif: WhatIf) -> Change:
        lines = len(whatif.frequencies)
        factors = tuple(
            np.tile([self.velocity.get(load.acts_on, 1.0 + 0j) for load in held.loads], (lines, 1))
            for held in whatif.case.load_cases
        )
        return Change((), factors)


def _energy(steps: list[tuple[float, WhatIf]], draw: _Draw, chosen: tuple[int, ...], goal: Goal) -> float:
    """Band energy of a draw, interpolated between the tables on either side of its damping."""
    places = [place for place, _ in steps]
    upper = min(int(np.searchsorted(places, draw.damping)), len(steps) - 1)
    pair = steps[max(upper - 1, 0) : upper + 1]
    logs = []
    for _, whatif in pair:
        squares = whatif.squares(draw.changes(whatif, chosen), goal.load_case)
        logs.append(np.log(whatif.energy(squares, goal)))
    return float(np.exp(np.interp(draw.damping, [place for place, _ in pair], logs)))
