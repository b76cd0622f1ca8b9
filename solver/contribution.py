"""Which panel makes the noise: participation and ranking of loads.

    share_i   = (1/2) Re sum_j G_ij p_i conj(p_j)      adds up to the mean square; negative where a panel quietens
    own_i     = (1/2) G_ii |p_i|^2                     the panel alone
    removal_i = 10 lg( mean square without i / mean square )

A place is a receiver or a radiated power (`radiation`), whose p_i conj(p_j) is the power's Hermitian form.

For coherent loads share_i / total is the signed share Re(p_i conj p) / |p|^2. A ranking by these numbers tells what
*quietening* a panel (lowering its velocity) is worth; it does not tell where an absorber helps.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from murmesh.solver.errors import ResultError
from murmesh.solver.levels import Band, band_energy, level
from murmesh.solver.radiation import is_power, mean_square, pair_squares
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]

SILENCE = 1e-12
"""Part of a mean square below which what is left of it is rounding."""
QUIETENING = (
    "Ranks quietening a panel (lowering its velocity), not treating it: where an absorber helps takes a new solution "
    "with the absorber in place."
)


@dataclass(frozen=True, eq=False)
class Participation:
    """Mean squares at one place [Pa2, or Pa2/Hz for a density]: (nf, loads), and the total (nf,)."""

    receiver: str
    load_case: str
    loads: tuple[str, ...]
    frequencies: Floats
    shares: Floats
    own: Floats
    without: Floats
    total: Floats

    @property
    def signed(self) -> Floats:
        """share_i / total, (nf, loads), summing to 1 (0 where the total is 0)."""
        return np.divide(self.shares, self.total[:, None], out=np.zeros_like(self.shares), where=self.total[:, None] > 0)

    @property
    def removal_db(self) -> Floats:
        """Change of level [dB] if the panel were silent, (nf, loads); positive where it was quietening, 0 in silence."""
        heard = self.total[:, None] > 0
        ratio = np.divide(np.maximum(self.without, 0.0), self.total[:, None], out=np.ones_like(self.without), where=heard)
        return np.asarray(level(ratio, 1.0))

    @property
    def closure(self) -> float:
        """Worst |sum of shares - total| / total over the sweep."""
        scale = np.maximum(self.total, 1e-300)
        return float(np.max(np.abs(self.shares.sum(axis=1) - self.total) / scale, initial=0.0))


@dataclass(frozen=True)
class Row:
    """One panel in a ranking: its part of the mean square, its level alone, and the level change if it were silent."""

    panel: str
    share: float
    own_db: float
    removal_db: float


@dataclass(frozen=True)
class Ranking:
    """Panels in the order of their share of the band energy; `closure` is |sum of shares - 1|."""

    rows: tuple[Row, ...]
    total_db: float
    closure: float
    band: tuple[float, float]
    weighting: str
    receivers: tuple[str, ...]
    load_case: str
    words: str = QUIETENING

    @property
    def power(self) -> bool:
        """Whether it ranks shares of a sound power; levels are then re 1 pW."""
        return is_power(self.receivers[0])

    @property
    def what(self) -> str:
        """What the shares are of."""
        return "power" if self.power else "mean square"


def participation(result: Result, receiver: str, load_case: str = "") -> Participation:
    """Participation of every load at one receiver, or in a radiated power."""
    held = result.load_case(load_case)
    pairs = pair_squares(result, receiver, load_case)
    shares, own = pairs.sum(axis=2), np.einsum("fii->fi", pairs).copy()
    total = _total(result, receiver, load_case)
    without = total[:, None] - 2 * shares + own
    return Participation(receiver, held.name, held.loads, result.frequencies, shares, own, without, total)


def _total(result: Result, receiver: str, load_case: str) -> Floats:
    """The mean square from the summed pressure itself, so that the shares' closure is a real check."""
    if is_power(receiver):
        return mean_square(result, receiver, load_case)
    held, index = result.load_case(load_case), result.samples(receiver)
    case = result.load_case_of(load_case)
    mix = case.combination.factors(result.frequencies, len(held.loads))
    pressure = np.einsum("fsl,flr->fsr", held.contributions[:, index], mix)
    square = np.einsum("s,fsr->f", result.sample_weight[index], np.abs(pressure) ** 2)
    return np.asarray(0.5 * square / (case.bandwidth if case.spectrum == "density" else 1.0))


def rank(
    result: Result,
    receivers: Iterable[str],
    band: tuple[float, float] | None = None,
    weighting: str = "A",
    load_case: str = "",
) -> Ranking:
    """Rank the loads of a load case by their share of the band energy, summed over `receivers` (empty: all of them), or by
    their share of a radiated power, which stands alone.

    `band` is (lower, upper) [Hz], the whole sweep if None; `weighting` is "A", "C" or "Z".
    """
    names = tuple(receivers) or tuple(receiver.name for receiver in result.case.receivers)
    if any(map(is_power, names)) and len(names) > 1:
        raise ResultError(f"a sound power and levels at receivers cannot be added: {', '.join(names)}; rank them one by one")
    if not names:
        raise ResultError("the case has no receiver, so nothing can be ranked; add a receiver and solve again")
    low, high = band or (float(result.frequencies[0]), float(result.frequencies[-1]))
    if not low < high and len(result.frequencies) > 1:
        raise ResultError(f"band {low:g} .. {high:g} Hz is empty; give lower < upper")
    parts = [participation(result, name, load_case) for name in names]
    integrate = _Band(result, low, high, weighting, load_case)
    shares, own, without = (integrate(sum_(parts, key)) for key in ("shares", "own", "without"))
    total = integrate(sum_(parts, "total")[:, None])[0]
    if not total > 0:
        raise ResultError(f"no energy between {low:g} and {high:g} Hz (no line, or no load there); choose another band")
    rows = [
        Row(name, float(shares[i] / total), float(level(own[i] / len(names))), _change(without[i], total))
        for i, name in enumerate(parts[0].loads)
    ]
    rows.sort(key=lambda row: -row.share)
    closure = float(abs(shares.sum() / total - 1))
    level_db = float(level(total / len(names)))
    return Ranking(tuple(rows), level_db, closure, (low, high), weighting, names, parts[0].load_case)


def sum_(parts: list[Participation], key: str) -> Floats:
    """A quantity summed over receivers."""
    return np.asarray(np.sum([getattr(part, key) for part in parts], axis=0))


def _change(without: float, total: float) -> float:
    """Change of level [dB]; -inf where nothing but rounding is left."""
    return float(level(without if without > SILENCE * total else 0.0) - level(total))


class _Band:
    """Energy of the columns of (nf, n) mean squares within one band."""

    def __init__(self, result: Result, low: float, high: float, weighting: str, load_case: str) -> None:
        self.frequencies = result.frequencies
        self.spectrum = result.load_case_of(load_case).spectrum
        # a band that ends on the sweep's last tone still holds it
        upper = high * (1 + 1e-9) if self.spectrum == "tones" else high
        self.band = Band(f"{low:g}-{high:g}", float(np.sqrt(low * high)), low, upper)
        self.weighting = weighting

    def __call__(self, squares: Floats) -> Floats:
        columns = [
            band_energy(self.frequencies, column, [self.band], self.spectrum, self.weighting)[0][0] for column in squares.T
        ]
        return np.asarray(columns)
