"""Numbers of the unknowns: one order per tetrahedron, the minimum rule on what neighbours share."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from murmesh.solver.elements.tetrahedron import CELL, EDGE, FACE, MAX_ORDER, function_count, layout
from murmesh.solver.errors import MeshError
from murmesh.solver.topology import Topology

Ints = npt.NDArray[np.int64]


@dataclass(frozen=True)
class DofMap:
    """Unknowns of a mesh: vertices first, then edges, faces and interiors, each entity's in ascending degree.

    topology                    the entity numbers
    orders (t,)                 order of each tetrahedron
    entity_orders (n_entities,) order of each vertex, edge, face and interior: the lowest among its tetrahedra
    offsets (n_entities + 1,)   the unknowns of entity e are offsets[e]:offsets[e+1]
    """

    topology: Topology
    orders: Ints
    entity_orders: Ints
    offsets: Ints

    @staticmethod
    def build(topology: Topology, orders: npt.ArrayLike) -> DofMap:
        """Number the unknowns for orders (t,) or one order for all.

        Raises: MeshError when an order is outside 1..8 or their number is not that of the tetrahedra.
        """
        table = _checked_orders(np.asarray(orders, dtype=np.int64), topology.n_tets)
        numbers = (topology.n_vertices, topology.n_edges, topology.n_faces)
        ids = (topology.tet_vertex_ids, topology.tet_edge_ids, topology.tet_face_ids)
        levels = [_lowest(i, n, table) for i, n in zip(ids, numbers, strict=True)] + [table]
        sizes = [function_count(kind, level) for kind, level in enumerate(levels)]
        offsets = np.concatenate([[0], np.cumsum(np.concatenate(sizes))])
        return DofMap(topology, table, np.concatenate(levels), offsets)

    @property
    def n_dofs(self) -> int:
        """Number of unknowns."""
        return int(self.offsets[-1])

    @property
    def max_order(self) -> int:
        """The highest order in use."""
        return int(self.orders.max())

    @cached_property
    def first_entity(self) -> Ints:
        """(5,): where vertices, edges, faces and interiors begin in the list of entities, and its length."""
        t = self.topology
        return np.cumsum([0, t.n_vertices, t.n_edges, t.n_faces, t.n_tets])

    @cached_property
    def sizes(self) -> Ints:
        """(n_entities,): unknowns of each entity."""
        return np.diff(self.offsets)

    @cached_property
    def vertex_dofs(self) -> Ints:
        """(n_vertices,): the unknown of each vertex, whose value is the pressure there."""
        return self.offsets[: self.topology.n_vertices]

    def entities(self, tets: Ints) -> Ints:
        """(m, 15): the entities of tetrahedra, in the order of the local layout."""
        t, first = self.topology, self.first_entity
        return np.hstack(
            [
                t.tet_vertex_ids[tets],
                t.tet_edge_ids[tets] + first[EDGE],
                t.tet_face_ids[tets] + first[FACE],
                np.asarray(tets)[:, None] + first[CELL],
            ]
        )

    def element_dofs(self, tets: npt.ArrayLike) -> Ints:
        """(m, nloc): unknowns of tetrahedra of one order, -1 for functions switched off by the minimum rule.

        Raises: MeshError when the tetrahedra are of different orders.
        """
        table = np.asarray(tets, dtype=np.int64)
        found = np.unique(self.orders[table])
        if len(found) > 1:
            raise MeshError(f"tetrahedra of orders {found.tolist()} were given together; expected one order: group them")
        return self.dofs_up_to(table, int(found[0]) if len(found) else 1)

    def dofs_up_to(self, tets: Ints, order: int) -> Ints:
        """(m, nloc(order)): unknowns of tetrahedra in the layout of `order`, -1 for those that do not exist."""
        local = layout(order)
        rank = np.arange(local.size) - local.starts[local.entity]
        entities = self.entities(tets)[:, local.entity]
        return np.where(rank < self.sizes[entities], self.offsets[entities] + rank, -1)

    def order_groups(self, tets: npt.ArrayLike | None = None) -> list[tuple[int, Ints]]:
        """(order, positions) of the given tetrahedra (default all), one pair per order present."""
        orders = self.orders if tets is None else self.orders[np.asarray(tets, dtype=np.int64)]
        return [(int(p), np.flatnonzero(orders == p)) for p in np.unique(orders)]

    def selection_of(self, lower: DofMap) -> Ints:
        """(lower.n_dofs,): where the unknowns of a map of lower orders on the same topology stand in this one.

        K[s][:, s] of this map is K of the lower one, for s = selection_of(lower): the basis is hierarchic.
        Raises: MeshError when the topology differs or an order of `lower` is above this map's.
        """
        if self.topology is not lower.topology or np.any(lower.orders > self.orders):
            raise MeshError("expected a map of the same topology with lower or equal orders; build both from one Topology")
        rank = np.arange(lower.n_dofs) - np.repeat(lower.offsets[:-1], lower.sizes)
        return np.repeat(self.offsets[:-1], lower.sizes) + rank


def _checked_orders(orders: Ints, n_tets: int) -> Ints:
    if orders.ndim == 0:
        orders = np.full(n_tets, orders)
    if orders.shape != (n_tets,):
        raise MeshError(f"{orders.shape} orders were given for {n_tets} tetrahedra; expected one each")
    bad = np.flatnonzero((orders < 1) | (orders > MAX_ORDER))
    if len(bad):
        raise MeshError(
            f"element order {orders[bad[0]]} of tetrahedron {bad[0]} is outside 1 to {MAX_ORDER}: choose one of these"
        )
    return orders


def _lowest(ids: Ints, count: int, orders: Ints) -> Ints:
    """The lowest order among the tetrahedra around each entity."""
    out = np.full(count, MAX_ORDER, dtype=np.int64)
    for p in range(MAX_ORDER - 1, 0, -1):
        out[ids[orders == p]] = p
    return out
