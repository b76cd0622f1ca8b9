"""The order of every element: as few unknowns as the accuracy at the receivers allows.

    e   = sqrt( (8.686 D / eta)^2 + (13 L)^2 )  <=  accuracy [dB],    in every region by itself
    D   = mean over the volume of d(k h, p),   d = 1/2 [p!/(2p)!]^2 (k h)^(2p) / (2p + 1)
    L^2 = mean over the volume of l(k h, p)^2, l = 5.2 (k h / 4)^(p+1) / ((p + 1) (p + 1)!)  [dB]

h is an element's mean edge (0.8 of its longest where that is more: stretched elements), k = |w/c| of its medium.
d is the relative shift of the wavenumber (Ihlenburg & Babuska, SINUM 34 (1997) 315; Ainsworth, SINUM 42 (2004) 553;
leading term): a mode of loss factor eta answers it by at most 8.686 d / eta dB,
and it feels the *mean* over the volume it fills. l is the error of the best polynomial for plane waves on a regular
tetrahedron (fitted to L2 projections, kh = 0.5 to 6, p = 1 to 8, within 20 %), taken at the orders that the minimum rule
leaves on an element's edges. 13 = 6.4 x 2: what the receivers of lossy boxes with exact solutions showed, times a margin
for receivers near nodes of the field (fitted on boxes like those of tests/benchmarks/orders.py, of other seeds: the error
was 0.1 to 0.8 of an accuracy of 0.1 dB; at 0.3 dB, with orders 2 and 3, it was up to 1.1).

Because both errors are means over the volume, a small element may be worse than a large one: its order is the one with
the lowest n(p) + lambda V e(p), with n(p) the unknowns of an element in a large mesh and lambda as low as e allows. No
element's own error exceeds 3 l <= accuracy / 2 or 10 times the mean that D may reach, lest a mode or a receiver sits in it.

The rule knows neither corners of the field nor sources inside an element; the smallest loss of a mode is itself a guess.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from math import factorial

import numpy as np
import numpy.typing as npt

from murmesh.solver.case.boundary import Adjacent, Boundary
from murmesh.solver.case.medium import damped
from murmesh.solver.case.model import HIGHEST_ORDER, Case
from murmesh.solver.topology import Topology

Ints = npt.NDArray[np.int64]
Floats = npt.NDArray[np.float64]

ORDERS = np.arange(1, HIGHEST_ORDER + 1)
NEPER = 20 / np.log(10)
"""dB of a relative change of e."""
UNKNOWNS = 2 / 11 + (ORDERS - 1) * (7 / 6 + (ORDERS - 2) + (ORDERS - 2) * (ORDERS - 3) / 6)
"""n(p): unknowns per tetrahedron of a large mesh (about 5.5 tetrahedra per vertex, 7/6 edges and 2 faces per tetrahedron)."""
LOCAL_WEIGHT = 13.0
LOCAL_CAP = 1 / 6
"""Largest l of one element, in accuracies."""
SHIFT_CAP = 10.0
"""Largest d of one element, in means."""
STRETCHED = 0.8
"""Share of the longest edge that counts: 1.2 times the mean is common among regular tetrahedra."""
SMALLEST_LOSS = 0.003
"""Loss factor taken where none is stated: peaks are unbounded then, and the check warns."""


@dataclass(frozen=True)
class Wall:
    """A part of a surface in front of one region: its kind and area [m2]."""

    region: int
    boundary: Boundary
    area: float


def a_priori_error(kh: float, order: int) -> float:
    """8.686 * 2 (k h / 4)^(p+1) / (p+1)!  [dB], h the mean edge: for the size of a mesh that is still to be made.

    Fitted on lossy cavities with exact solutions (common practice, no source); it knows neither damping nor pollution.
    """
    return float(8.686 * 2 * (kh / 4) ** (order + 1) / factorial(order + 1))


def local_error(kh: Floats) -> Floats:
    """l (t, 8) [dB] at orders 1..8, see the head of this module."""
    scale = np.array([5.2 / ((p + 1) * factorial(p + 1)) for p in ORDERS.tolist()])
    return np.asarray(scale * (kh[:, None] / 4) ** (ORDERS + 1))


def wavenumber_shift(kh: Floats) -> Floats:
    """d (t, 8) at orders 1..8, not above 0.3, where the leading term has lost its meaning."""
    scale = np.array([0.5 * (factorial(p) / factorial(2 * p)) ** 2 / (2 * p + 1) for p in ORDERS.tolist()])
    return np.minimum(scale * kh[:, None] ** (2 * ORDERS), 0.3)


# ---------------------------------------------------------------------------------------------------------------------
# what the rule looks at


def mean_edges(case: Case) -> Floats:
    """Mean edge length of every tetrahedron, (t,) [m]."""
    return np.asarray(_edges(case).mean(axis=0))


def _edges(case: Case) -> Floats:
    corners = case.mesh.nodes[case.mesh.tets[:, :4]]
    pairs = ((0, 1), (0, 2), (0, 3), (1, 2), (1, 3), (2, 3))
    return np.stack([np.linalg.norm(corners[:, a] - corners[:, b], axis=1) for a, b in pairs])


def elements_kh(case: Case, frequency: float = 0.0) -> Floats:
    """|k| h at a frequency [Hz] (0: the highest of the sweep) for every tetrahedron, (t,)."""
    return np.asarray(_wavenumbers(case, frequency or case.sweep.frequencies[-1])[case.mesh.tet_region] * mean_edges(case))


def _wavenumbers(case: Case, f: float) -> Floats:
    """|w/c| (regions,) [1/m]."""
    return np.array([abs(2 * np.pi * f / region.medium.c(np.array([f]))[0]) for region in case.regions])


def _volumes(case: Case) -> Floats:
    corners = case.mesh.nodes[case.mesh.tets[:, :4]]
    return np.asarray(np.abs(np.linalg.det(corners[:, 1:] - corners[:, :1])) / 6)


def modal_loss(case: Case, walls: Iterable[Wall], frequency: float) -> float:
    """The loss factor eta that the slowest mode is taken to have, over the half octave below a frequency [Hz].

    eta_r = -Im k^2 / Re k^2 + c sum_s alpha_s S_s / (4 w V_r), alpha = 1 - |R|^2: losses of the medium, and of walls in a
    diffuse field. The lowest eta_r counts, because sound may be held in one region, but not less than a quarter of the
    whole model's; and not more than 1/(k l), l its diagonal: sound that dies out on its way still has to arrive in phase.
    """
    lines = case.sweep.frequencies
    f = np.append(lines[(lines > frequency / np.sqrt(2)) & (lines < frequency)], frequency)
    volume = np.bincount(case.mesh.tet_region, weights=_volumes(case), minlength=len(case.regions))
    inside, through = np.zeros((2, len(case.regions), len(f)))
    for index, region in enumerate(case.regions):
        _, c = damped(region.medium, region.damping, f)
        inside[index] = np.maximum(-np.imag(c**-2) / np.real(c**-2), 0.0) if np.all(np.real(c**-2) > 0) else 1.0
    for wall in walls:
        c = np.abs(case.regions[wall.region].medium.c(f))
        through[wall.region] += c * _absorption(case, wall, f) * wall.area / (8 * np.pi * f)
    share = volume / volume.sum()
    parts = inside + through / np.maximum(volume, 1e-300)[:, None]
    whole = share @ inside + through.sum(axis=0) / volume.sum()
    eta = float(np.min(np.maximum(parts[volume > 0].min(axis=0), whole / 4)))
    k = float(share @ _wavenumbers(case, frequency))
    diagonal = float(np.linalg.norm(np.ptp(case.mesh.nodes[np.unique(case.mesh.tets)], axis=0)))
    return max(min(eta, 1 / (k * diagonal)), SMALLEST_LOSS)


def _absorption(case: Case, wall: Wall, f: Floats) -> Floats:
    """1 - |R|^2 (nf,) at normal incidence; 0 for a wall that gives sound back, or more than it took."""
    region = case.regions[wall.region]
    rho, c = damped(region.medium, region.damping, f)
    fluid = Adjacent(region.medium.reference, rho * c)
    own = wall.boundary.admittance(f, fluid)
    if own is None and wall.boundary.radiates:
        own = 1.0 / fluid.impedance
    if own is None and wall.boundary.hard:
        own = region.damping.hard_wall_admittance(f, fluid.fluid)
    if own is None:
        return np.zeros(len(f))
    y = own * region.medium.rho(f) * region.medium.c(f)
    return np.asarray(np.maximum(1 - np.abs((1 - y) / (1 + y)) ** 2, 0.0))


# ---------------------------------------------------------------------------------------------------------------------
# the choice


@dataclass(frozen=True, eq=False)
class _Rule:
    """Tables (t, 8) in accuracies: `shift` is 8.686 d / eta, `local` is 13 l; `share` (t,) of its region's volume."""

    topology: Topology
    region: Ints
    share: Floats
    shift: Floats
    local: Floats

    @classmethod
    def of(cls, case: Case, topology: Topology, walls: Iterable[Wall], frequency: float) -> _Rule:
        edges, volume, region = _edges(case), _volumes(case), case.mesh.tet_region
        kh = _wavenumbers(case, frequency)[region] * np.maximum(edges.mean(axis=0), STRETCHED * edges.max(axis=0))
        share = volume / np.bincount(region, weights=volume, minlength=len(case.regions))[region]
        per_accuracy = 1 / case.sweep.accuracy
        shift = NEPER / modal_loss(case, walls, frequency) * per_accuracy * wavenumber_shift(kh)
        return cls(topology, region, share, shift, LOCAL_WEIGHT * per_accuracy * local_error(kh))

    @property
    def regions(self) -> int:
        return int(self.region.max()) + 1

    def errors(self, orders: Ints) -> Floats:
        """e (regions,) in accuracies."""
        shift = np.take_along_axis(self.shift, orders[:, None] - 1, axis=1)[:, 0]
        edges = np.take_along_axis(self.local, _edge_orders(self.topology, orders) - 1, axis=1)
        parts = self.share * shift, self.share * np.mean(edges**2, axis=1)
        means = [np.bincount(self.region, weights=part, minlength=self.regions) for part in parts]
        return np.asarray(np.sqrt(means[0] ** 2 + means[1]))

    def choose(self) -> Ints:
        """The orders (t,) of lowest n + lambda V e, lambda by bisection of its logarithm; regions no order can serve apart."""
        cost = self.share[:, None] * (self.shift + self.local**2)
        barred = (self.local > LOCAL_WEIGHT * LOCAL_CAP) | (self.shift > SHIFT_CAP)
        barred[:, -1] = False
        floor = UNKNOWNS + np.where(barred, np.inf, 0.0)
        able = self.errors(np.full(len(self.region), HIGHEST_ORDER, dtype=np.int64)) <= 1
        low, high = -4.0, 12.0
        for _ in range(14):
            middle = (low + high) / 2
            if np.any(self.errors(self._at(floor, cost, middle))[able] > 1):
                low = middle
            else:
                high = middle
        return self._at(floor, cost, high)

    def _at(self, floor: Floats, cost: Floats, exponent: float) -> Ints:
        return _filled(self.topology, np.argmin(floor + 10.0**exponent * cost, axis=1) + 1)


def _edge_orders(topology: Topology, orders: Ints) -> Ints:
    """(t, 6): what the minimum rule leaves on the edges of every tetrahedron."""
    lowest = np.full(topology.n_edges, HIGHEST_ORDER, dtype=np.int64)
    np.minimum.at(lowest, topology.tet_edge_ids.ravel(), np.repeat(orders, 6))
    return lowest[topology.tet_edge_ids]


def _filled(topology: Topology, orders: Ints) -> Ints:
    """Raise elements that three neighbours or more surpass: alone among them, they would lower what these share."""
    inner = topology.face_tets[topology.face_tets[:, 1] >= 0]
    for _ in range(3):
        a, b = orders[inner[:, 0]], orders[inner[:, 1]]
        above = np.bincount(inner[a < b, 0], minlength=len(orders)) + np.bincount(inner[a > b, 1], minlength=len(orders))
        orders = np.where(above >= 3, orders + 1, orders)
    return orders


def element_orders(case: Case, topology: Topology, walls: Iterable[Wall], frequency: float = 0.0) -> Ints:
    """Orders (t,) of the elements that keep e below `case.sweep.accuracy` at a frequency (0: the highest of the sweep)."""
    return _Rule.of(case, topology, tuple(walls), frequency or float(case.sweep.frequencies[-1])).choose()


def expected_errors(case: Case, topology: Topology, walls: Iterable[Wall], orders: Ints, frequency: float = 0.0) -> Floats:
    """e (regions,) [dB] of given orders (t,) at a frequency (0: the highest of the sweep)."""
    rule = _Rule.of(case, topology, tuple(walls), frequency or float(case.sweep.frequencies[-1]))
    return np.asarray(rule.errors(orders) * case.sweep.accuracy)


def orders_text(orders: npt.ArrayLike) -> str:
    """ "order 4" or "orders 2 to 5"."""
    low, high = int(np.min(orders)), int(np.max(orders))
    return f"order {low}" if low == high else f"orders {low} to {high}"
