"""The power balance over a band: what each load puts in, what each surface and volume takes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from murmesh.solver.errors import ResultError
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]
MEANING = "A negative input means that the others drive that load's surface; volumes take power by their losses."


@dataclass(frozen=True)
class Balance:
    """Powers [W] by load and by label, largest first."""

    load_case: str
    supplied: dict[str, float]
    taken: dict[str, float]

    @property
    def total(self) -> float:
        """What all loads put in [W]."""
        return sum(self.supplied.values())

    @property
    def imbalance(self) -> float:
        """|input - taken| / |input|; 0 where nothing is put in."""
        return abs(self.total - sum(self.taken.values())) / abs(self.total) if self.total else 0.0

    @property
    def rows(self) -> list[tuple[str, float]]:
        """(sign and name, power [W]): what is put in, then what is taken."""
        return [
            *((f"+ {name}", w) for name, w in self.supplied.items()),
            *((f"- {name}", w) for name, w in self.taken.items()),
        ]


def balance(result: Result, band: tuple[float, float] | None = None, load_case: str = "") -> Balance:
    """The balance over `band` [Hz] (None: the whole sweep). Raises ResultError where no line lies in it."""
    held = result.load_case(load_case)
    weights = _weights(result, band, load_case)
    supplied = dict(zip(held.loads, (weights @ held.supplied).tolist(), strict=True))
    taken = dict(zip(result.power_labels, (weights @ held.absorbed).tolist(), strict=True))
    return Balance(held.name, _largest_first(supplied), _largest_first(taken))


def _weights(result: Result, band: tuple[float, float] | None, load_case: str) -> Floats:
    """How much each line counts: 1 for tones, its share of the frequency axis over the bandwidth for a density."""
    f, case = result.frequencies, result.load_case_of(load_case)
    low, high = band or (f[0], f[-1])
    inside = (f >= low) & (f <= high)
    if not inside.any():
        raise ResultError(f"no line lies between {low:g} and {high:g} Hz; choose another band")
    if case.spectrum == "tones" or inside.sum() == 1:
        return inside.astype(np.float64)
    edges = np.concatenate([[f[inside][0]], (f[inside][1:] + f[inside][:-1]) / 2, [f[inside][-1]]])
    weights = np.zeros(len(f))
    weights[inside] = np.diff(edges) / case.bandwidth
    return weights


def _largest_first(powers: dict[str, float]) -> dict[str, float]:
    return dict(sorted(powers.items(), key=lambda item: -item[1]))
