"""A result as post-processing views of the current gmsh session: levels on surfaces and cut planes, phase, contributions.

    views = Views(read_result("cab_result.h5"))
    views.levels(95.0)                       level on the surfaces
    views.cut(95.0, normal=(0, 1, 0))        level on a plane through the receivers
    views.phase(95.0)                        Re(p e^{iwt}) over one period, a time step per phase
    views.panels(95.0, "left_ear")           share of the mean square at a receiver, per panel

The values are sampled from the elements themselves. Where points lie does not depend on the frequency, so they are located
once and another frequency costs one product of a sparse matrix and the unknowns. Every view shows fixed limits.
"""

from __future__ import annotations

import tempfile
from dataclasses import dataclass
from functools import cache, cached_property
from pathlib import Path
from typing import Any

import matplotlib
import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from murmesh.plugin.describe import hertz, is_density, level_unit, plain
from murmesh.plugin.fields import field_levels, kept_line
from murmesh.plugin.gmsh_session import current_gmsh
from murmesh.plugin.pictures.style import LEVEL_MAP, SIGNED_MAP, level_limits
from murmesh.plugin.sampling import sample_skin
from murmesh.solver.assembly import evaluate
from murmesh.solver.contribution import participation
from murmesh.solver.errors import ResultError
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Complex = npt.NDArray[np.complex128]
Vector = tuple[float, float, float]

PHASES = 24
_PIECES = 40_000  # flat triangles of all surfaces together: what a window still turns smoothly
_CELLS = 120  # of a cut plane along its longer edge
_COLOURS = 64
_BESIDE = 1e-7  # of the model's longest extent: a plane that lies in a sheet would meet either side at random
NAMES = {"levels": "Level on surfaces", "cut": "Level on cut plane", "phase": "Pressure", "panels": "Share of mean square"}


@dataclass(frozen=True, eq=False)
class Sampled:
    """Flat triangles (m, 3) of points (k, 3) [m], and the sparse rows (k, n) that evaluate unknowns there."""

    points: Floats
    triangles: Ints
    rows: Any
    surface: Ints


class Views:
    """The views of one result. `scale` is the length [m] of one unit of the gmsh model they lie over."""

    def __init__(self, result: Result, scale: float = 1.0) -> None:
        self.result = result
        self._scale = scale
        self._cut = cache(self._cut_at)
        self._heard = cache(lambda receiver, load_case: participation(result, receiver, load_case))

    @cached_property
    def _skin(self) -> Sampled:
        space = self.result.space
        faces = max(1, sum(len(side.tet) for side in space.sides))
        pieces = int(np.clip(np.sqrt(_PIECES / faces), 1, 6))
        skin = sample_skin(space, pieces)
        rows = evaluate(space.geometry, space.dofs, skin.cloud.tet, skin.cloud.bary)
        return Sampled(skin.cloud.points, skin.triangles, rows, skin.surface)

    def line(self, frequency: float | None = None, load_case: str = "") -> float:
        """The line shown for a frequency; None takes the loudest. Raises ResultError where none is kept."""
        if self.result.model is None or frequency is None:
            return kept_line(self.result, frequency, load_case)
        lines = self.result.frequencies  # a reduced model gives the field of every line
        return float(lines[np.abs(lines - frequency).argmin()])

    def limits(self, frequency: float | None = None, load_case: str = "") -> tuple[float, float]:
        """Limits [dB] for level views: 40 dB below the highest level on the surfaces at a line, rounded up to 5 dB."""
        return level_limits(self._levels(self._skin, self.line(frequency, load_case), load_case))

    def levels(self, frequency: float | None = None, load_case: str = "", limits: tuple[float, float] | None = None) -> int:
        """Level on the surfaces; the tag of the view."""
        line = self.line(frequency, load_case)
        levels = self._levels(self._skin, line, load_case)
        return self._level_view("levels", self._skin, levels, line, load_case, limits)

    def cut(
        self,
        frequency: float | None = None,
        load_case: str = "",
        *,
        origin: Vector | None = None,
        normal: Vector = (0.0, 1.0, 0.0),
        limits: tuple[float, float] | None = None,
    ) -> int:
        """Level on a plane through `origin` (default: the mean of the receivers) square to `normal`; the tag of the view."""
        line = self.line(frequency, load_case)
        plane = self._cut(origin or self._middle(), normal)
        return self._level_view("cut", plane, self._levels(plane, line, load_case), line, load_case, limits)

    def phase(self, frequency: float | None = None, load_case: str = "", *, plane: tuple[Vector, Vector] | None = None) -> int:
        """Re(p e^{iwt}) over one period on the surfaces, or on a plane (origin, normal); the tag of the view.

        Of loads that do not act coherently the first of the pressures whose mean squares add is shown.
        """
        line = self.line(frequency, load_case)
        where = self._skin if plane is None else self._cut(*plane)
        p = (where.rows @ self.result.field(line, load_case))[:, 0]
        turns = np.exp(2j * np.pi * np.arange(PHASES) / PHASES)
        steps = np.real(p[:, None] * turns[None, :])
        reach = float(np.abs(p).max(initial=0.0)) or 1.0
        name = f"{NAMES['phase']} at {hertz(line)} [Pa], e^(+iwt), peak"
        tag = self._shown("phase", name, where.points, where.triangles, steps[where.triangles], SIGNED_MAP, (-reach, reach))
        current_gmsh().view.option.setNumber(tag, "ShowTime", 0)
        return tag

    def panels(self, frequency: float | None = None, receiver: str = "", load_case: str = "") -> int:
        """The share of every panel in the mean square at a receiver and one line, in percent; the tag of the view."""
        lines = self.result.frequencies
        line = lines[int(np.abs(lines - (frequency or self.line(None, load_case))).argmin())]
        shares = self.shares(float(line), receiver, load_case)
        names = [surface.name for surface in self.result.case.surfaces]
        values = np.array([shares.get(name, np.nan) for name in names] + [np.nan])[self._skin.surface]
        loaded = np.isfinite(values)
        reach = 10.0 * np.ceil(max(10.0, *map(abs, shares.values())) / 10.0)
        steps = np.repeat(values[loaded], 3).reshape(-1, 3, 1)
        name = f"{NAMES['panels']} at {receiver or self._first_receiver()}, {hertz(float(line))} [%]"
        return self._shown("panels", name, self._skin.points, self._skin.triangles[loaded], steps, SIGNED_MAP, (-reach, reach))

    def shares(self, line: float, receiver: str = "", load_case: str = "") -> dict[str, float]:
        """Signed share [%] of every load in the mean square at a receiver, the largest first."""
        held = self._heard(receiver or self._first_receiver(), load_case)
        index = int(np.abs(held.frequencies - line).argmin())
        found = dict(zip(held.loads, 100 * held.signed[index], strict=True))
        return {name: float(found[name]) for name in sorted(found, key=lambda key: -found[key])}

    def remove(self, *which: str) -> None:
        """Take away views (levels, cut, phase, panels; all of them if none is named) from the session."""
        for name in which or NAMES:
            _remove(name)

    # -- what is below -------------------------------------------------------------------------------------------------

    def _first_receiver(self) -> str:
        if not self.result.case.receivers:
            raise ResultError("the case has no receiver, so no share can be shown; add a receiver and solve again")
        return self.result.case.receivers[0].name

    def _middle(self) -> Vector:
        points = np.array([receiver.position for receiver in self.result.case.receivers]).reshape(-1, 3)
        nodes = self.result.case.mesh.nodes
        x, y, z = points.mean(axis=0) if len(points) else (nodes.min(axis=0) + nodes.max(axis=0)) / 2
        return float(x), float(y), float(z)

    def _levels(self, where: Sampled, line: float, load_case: str) -> Floats:
        pressure = np.asarray(where.rows @ self.result.field(line, load_case), dtype=np.complex128)
        return field_levels(self.result, pressure, load_case)

    def _level_view(
        self, which: str, where: Sampled, levels: Floats, line: float, load_case: str,
        limits: tuple[float, float] | None,
    ) -> int:  # fmt: skip
        unit = plain(level_unit("Z", is_density(self.result, load_case)))
        name = f"{NAMES[which]} at {hertz(line)} [{unit}]"
        steps = levels[where.triangles][:, :, None]
        return self._shown(which, name, where.points, where.triangles, steps, LEVEL_MAP, level_limits(levels, limits))

    def _cut_at(self, origin: Vector, normal: Vector) -> Sampled:
        space, nodes = self.result.space, self.result.case.mesh.nodes
        points, triangles = plane_grid(nodes, origin, normal)
        shift = _BESIDE * float(np.ptp(nodes, axis=0).max()) * np.asarray(normal) / np.linalg.norm(normal)
        tet, bary = space.geometry.locate(points + shift)
        whole = np.all(tet[triangles] >= 0, axis=1)
        if not whole.any():
            raise ResultError(f"the plane through {origin} with the normal {normal} misses the fluid; choose another")
        used, local = np.unique(triangles[whole], return_inverse=True)
        rows = evaluate(space.geometry, space.dofs, tet[used], bary[used])
        return Sampled(points[used], local.reshape(-1, 3), sp.csr_matrix(rows), np.full(len(local) // 3, -1))

    def _shown(
        self, which: str, name: str, points: Floats, triangles: Ints, steps: Floats, colours: str,
        limits: tuple[float, float],
    ) -> int:  # fmt: skip
        """Triangles (m, 3) with values (m, 3, steps) as a view in place of the one of the same sort."""
        gmsh = current_gmsh()
        tag = _remove(which)
        tag = gmsh.view.add(name, tag)
        _TAGS[which] = tag
        corners = points[triangles].transpose(0, 2, 1).reshape(len(triangles), 9) / self._scale
        values = steps.transpose(0, 2, 1).reshape(len(triangles), -1)
        gmsh.view.addListData(tag, "ST", len(triangles), np.hstack([corners, values]).ravel())
        _dress(gmsh, tag, colours, limits)
        return int(tag)


_TAGS: dict[str, int] = {}
"""The view of each sort in the gmsh session of this process; gmsh keeps one session, so there is one of each."""


def _remove(which: str) -> int:
    """Remove the view of a sort if there is one; its tag, or -1, to use again."""
    gmsh, tag = current_gmsh(), _TAGS.pop(which, -1)
    if tag in gmsh.view.getTags():
        gmsh.view.remove(tag)
        return tag
    return -1


def plane_grid(nodes: Floats, origin: Vector, normal: Vector) -> tuple[Floats, Ints]:
    """Points (k, 3) and triangles (m, 3) of a square lattice on a plane, as large as a box of `nodes` needs."""
    n = np.asarray(normal, dtype=np.float64)
    if not np.linalg.norm(n) > 0:
        raise ResultError(f"a cut needs a normal, got {tuple(normal)}; give a direction such as (0, 0, 1)")
    n = n / np.linalg.norm(n)
    u = np.cross(n, np.eye(3)[int(np.argmin(np.abs(n)))])
    u = u / np.linalg.norm(u)
    axes = np.stack([u, np.cross(n, u)])
    flat = (nodes - np.asarray(origin)) @ axes.T
    low, high = flat.min(axis=0), flat.max(axis=0)
    count = np.maximum(np.ceil((high - low) / (high - low).max() * _CELLS), 2).astype(int)
    s, t = (np.linspace(low[k], high[k], count[k] + 1) for k in (0, 1))
    grid = np.stack(np.meshgrid(s, t), axis=-1).reshape(-1, 2)
    corner = np.arange(count[1])[:, None] * (count[0] + 1) + np.arange(count[0])[None, :]
    a = corner.ravel()
    b, c, d = a + 1, a + count[0] + 2, a + count[0] + 1
    triangles = np.concatenate([np.stack([a, b, c], axis=1), np.stack([a, c, d], axis=1)])
    return np.asarray(origin + grid @ axes), triangles


def _dress(gmsh: Any, tag: int, colours: str, limits: tuple[float, float]) -> None:
    """Fixed limits, values beyond them shown as the limits, no lighting, one colour map per meaning."""
    low, high = limits
    numbers = {
        "RangeType": 2, "CustomMin": low, "CustomMax": high, "SaturateValues": 1, "IntervalsType": 3, "NbIso": 32,
        "Light": 0, "ShowElement": 0, "LineWidth": 1, "ShowScale": 1,
    }  # fmt: skip
    for option, value in numbers.items():
        gmsh.view.option.setNumber(tag, option, value)
    gmsh.view.option.setString(tag, "NumberFormat", "%.3g")
    _paint(gmsh, tag, colours)


def _paint(gmsh: Any, tag: int, colours: str) -> None:
    """The colour map, as a file of options: gmsh's functions do not reach a view's table of colours."""
    shades = np.rint(255 * matplotlib.colormaps[colours](np.linspace(0, 1, _COLOURS))[:, :3]).astype(int)
    table = ", ".join("{{{}, {}, {}}}".format(*shade) for shade in shades.tolist())
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "colours.opt"
        path.write_text(f"View[{gmsh.view.getIndex(tag)}].ColorTable = {{{table}}};\n", encoding="ascii")
        gmsh.merge(str(path))
