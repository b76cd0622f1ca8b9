"""What the checks of a case look at, worked out once: faces, owners, the fluid in front of every surface."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from murmesh.plugin.skin import Skin
from murmesh.solver.assembly import Geometry
from murmesh.solver.case.boundary import Adjacent, Sheet
from murmesh.solver.case.load import Load, Monopole
from murmesh.solver.case.medium import damped
from murmesh.solver.case.model import Case, Surface
from murmesh.solver.errors import CaseError

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Scene:
    """A case and what follows from it."""

    case: Case

    @cached_property
    def skin(self) -> Skin:
        return Skin(self.case.mesh.nodes, self.case.mesh.tets)

    @cached_property
    def owners(self) -> Ints:
        """Tetrahedra (m, 2) of every triangle, -1 for none."""
        return self.skin.owners(self.case.mesh.triangles)

    @cached_property
    def geometry(self) -> Geometry:
        return Geometry(self.case.mesh.nodes, self.case.mesh.tets)

    @property
    def frequencies(self) -> Floats:
        return self.case.sweep.frequencies

    def rows(self, surface: int) -> Ints:
        """Rows of the triangles of a surface."""
        return np.flatnonzero(self.case.mesh.triangle_surface == surface)

    def regions_of(self, surface: int) -> list[int]:
        """Regions that a surface touches."""
        tets = self.owners[self.rows(surface)].ravel()
        return [int(region) for region in np.unique(self.case.mesh.tet_region[tets[tets >= 0]])]

    def adjacent(self, region: int) -> Adjacent | None:
        """The fluid of a region over the sweep; None where its own laws fail (said elsewhere)."""
        held = self.case.regions[region]
        try:
            density, speed = damped(held.medium, held.damping, self.frequencies)
        except CaseError:
            return None
        return Adjacent(held.medium.reference, density * speed)

    def touching(self) -> Iterator[tuple[Surface, str, Adjacent]]:
        """Every surface with the name and the fluid of every region it touches."""
        for index, surface in enumerate(self.case.surfaces):
            for region in self.regions_of(index):
                fluid = self.adjacent(region)
                if fluid is not None:
                    yield surface, self.case.regions[region].name, fluid

    def loads(self) -> Iterator[tuple[str, Load]]:
        """Every load with the name of its load case."""
        for load_case in self.case.load_cases:
            for load in load_case.loads:
                yield load_case.name, load

    @cached_property
    def sources(self) -> tuple[Monopole, ...]:
        """All monopoles."""
        return tuple(load for _, load in self.loads() if isinstance(load, Monopole))

    @cached_property
    def parts(self) -> Ints:
        """Number of the connected volume of fluid of every tetrahedron, (t,); sheets without a transfer law part it."""
        from scipy.sparse import coo_matrix
        from scipy.sparse.csgraph import connected_components

        count = len(self.case.mesh.tets)
        pairs = np.sort(self.skin.joined, axis=1)
        closed = [
            np.sort(self.owners[self.rows(i)], axis=1)
            for i, surface in enumerate(self.case.surfaces)
            if isinstance(surface.boundary, Sheet) and surface.boundary.transfer is None
        ]
        if closed:
            shut = np.concatenate(closed)
            pairs = pairs[~np.isin(pairs @ [count, 1], shut @ [count, 1])]
        graph = coo_matrix((np.ones(len(pairs), dtype=np.int8), (pairs[:, 0], pairs[:, 1])), shape=(count, count))
        return np.asarray(connected_components(graph, directed=False)[1], dtype=np.int64)
